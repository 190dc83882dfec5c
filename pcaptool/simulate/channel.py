"""Channels that damage frames: independent errors, two-state bursts, periodic bursts, two-state loss."""

import numpy as np
from numpy.typing import NDArray


def independent_errors(rng: np.random.Generator, frames: int, bits: int, rate: NDArray[np.float64] | float
                       ) -> NDArray[np.bool_]:
    """Return which bits are wrong: bool (frame, bit); rate is one probability, or one per frame."""
    rates = np.broadcast_to(np.asarray(rate, np.float64), (frames,))
    return rng.random((frames, bits)) < rates[:, None]


def two_state(rng: np.random.Generator, steps: int, to_bad: float, to_good: float) -> NDArray[np.bool_]:
    """Return the states of a two-state Markov chain, True bad: bool (step,).

    The chain begins in its stationary distribution. Stays are geometric, drawn whole.
    Source: Gilbert (1960), Bell Syst. Tech. J. 39:1253-1265.
    """
    if to_bad <= 0:
        return np.zeros(steps, np.bool_)
    bad = bool(rng.random() < to_bad / (to_bad + to_good))
    lengths: list[int] = []
    flags: list[bool] = []
    done = 0
    while done < steps:
        length = int(rng.geometric(to_good if bad else to_bad))
        lengths.append(length)
        flags.append(bad)
        done += length
        bad = not bad
    return np.repeat(np.array(flags), lengths)[:steps]


def burst_errors(rng: np.random.Generator, frames: int, bits: int, to_bad: float, to_good: float,
                 wrong_in_bad: float, wrong_in_good: float = 0.0) -> NDArray[np.bool_]:
    """Return which bits a Gilbert-Elliott channel makes wrong: bool (frame, bit).

    The state runs on from frame to frame. Stationary error rate: (to_bad * wrong_in_bad + to_good *
    wrong_in_good) / (to_bad + to_good). Source: Elliott (1963), Bell Syst. Tech. J. 42:1977-1997.
    """
    bad = two_state(rng, frames * bits, to_bad, to_good).reshape(frames, bits)
    chance = rng.random((frames, bits))
    return np.where(bad, chance < wrong_in_bad, chance < wrong_in_good)


def periodic_bursts(rng: np.random.Generator, frames: int, bits: int, period: int, length: int, wrong: float
                    ) -> NDArray[np.bool_]:
    """Return wrong bits of a disturbance of ``length`` bits every ``period`` bits, phase random per frame."""
    phase = rng.integers(0, period, frames)
    inside = (np.arange(bits)[None, :] + phase[:, None]) % period < length
    return inside & (rng.random((frames, bits)) < wrong)


def losses(rng: np.random.Generator, frames: int, rate: float, mean_burst: float) -> NDArray[np.bool_]:
    """Return which frames are lost, in runs of mean length ``mean_burst`` (1: nearly independent)."""
    if rate <= 0:
        return np.zeros(frames, np.bool_)
    to_good = 1 / max(mean_burst, 1.0)
    return two_state(rng, frames, min(rate * to_good / (1 - rate), 1.0), to_good)
