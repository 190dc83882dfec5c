"""Channels: which bits of a stream are wrong, and which frames of a link are lost.

A link's air frames are taken as one stream of bits, frame after frame, the silence between them left
out; an event is a position in that stream. Every function draws events, not bits, so its cost is that
of the damage. Positions are int64, ascending, each once. States run on from frame to frame unless
``fresh`` is said.
"""

import numpy as np
from numpy.typing import NDArray

Positions = NDArray[np.int64]
TOUCHES = 1 << 22           # pairs of disturbance and bit looked at at once
NONE: Positions = np.zeros(0, np.int64)


def independent(rng: np.random.Generator, steps: int, rate: float) -> Positions:
    """Return which of some steps have an event, each with probability ``rate`` for itself.

    The distance from one event to the next is geometric, so distances are drawn instead of steps.
    """
    if rate <= 0 or steps <= 0:
        return NONE
    if rate >= 1:
        return np.arange(steps, dtype=np.int64)
    parts, at = [], -1
    while at < steps:
        expected = (steps - at) * rate
        gaps = rng.geometric(rate, int(expected + 4 * np.sqrt(expected)) + 16)
        parts.append(at + np.minimum(gaps, steps + 1).cumsum())
        at = int(parts[-1][-1])
    found = np.concatenate(parts)
    return found[: np.searchsorted(found, steps)]


def independent_by_frame(rng: np.random.Generator, bits: NDArray[np.int64], rate: NDArray[np.float64]
                         ) -> Positions:
    """Return wrong bits where every frame has an error probability of its own.

    bits  int64 (frame,)    air bits of each frame
    rate  float64 (frame,)  probability that one of its bits is wrong
    Drawn at the highest rate and thinned: Lewis and Shedler (1979), Naval Res. Logist. 26:403-413.
    """
    highest = float(rate.max(initial=0.0))
    found = independent(rng, int(bits.sum()), highest)
    if not len(found) or (rate == highest).all():
        return found
    frame = np.searchsorted(bits.cumsum(), found, side="right")
    return found[rng.random(len(found)) * highest < rate[frame]]


def bad_runs(rng: np.random.Generator, steps: int, to_bad: float, to_good: float
             ) -> tuple[Positions, Positions]:
    """Return the runs of the bad state of a two-state Markov chain: (first step, step behind the last).

    to_bad   p, probability to go from good to bad at a step
    to_good  r, probability to go from bad to good; stays are geometric, of mean 1 / p and 1 / r
    The chain begins in its stationary distribution, bad with p / (p + r).
    Source: Gilbert (1960), Bell Syst. Tech. J. 39:1253-1265.
    """
    if steps <= 0 or to_bad <= 0:
        return NONE, NONE
    if to_good <= 0:
        return np.zeros(1, np.int64), np.array([steps])
    first, end = [], []
    at = 0
    if rng.random() < to_bad / (to_bad + to_good):
        at = min(int(rng.geometric(to_good)), steps)
        first.append(np.zeros(1, np.int64))
        end.append(np.array([at]))
    while at < steps:
        expected = (steps - at) / (1 / to_bad + 1 / to_good)
        stays = int(expected + 4 * np.sqrt(expected)) + 16
        good = np.minimum(rng.geometric(to_bad, stays), steps + 1)
        bad = np.minimum(rng.geometric(to_good, stays), steps + 1)
        behind = at + (good + bad).cumsum()
        first.append(behind - bad)
        end.append(behind)
        at = int(behind[-1])
    begins, ends = np.concatenate(first), np.concatenate(end)
    inside = begins < steps
    return begins[inside], np.minimum(ends[inside], steps)


def fresh_bad_runs(rng: np.random.Generator, bits: NDArray[np.int64], to_bad: float, to_good: float
                   ) -> tuple[Positions, Positions]:
    """Return the runs of the bad state as ``bad_runs``, the chain beginning anew with every frame."""
    if to_bad <= 0:
        return NONE, NONE
    start = bits.cumsum() - bits
    if to_good <= 0:
        return start[bits > 0], (start + bits)[bits > 0]
    bad = rng.random(len(bits)) < to_bad / (to_bad + to_good)
    alive, at = np.flatnonzero(bits > 0), np.zeros(len(bits), np.int64)
    first, end = [NONE], [NONE]
    while len(alive):                       # one stay of every frame that is not at its end
        stay = rng.geometric(np.where(bad[alive], to_good, to_bad))
        until = np.minimum(at[alive] + np.minimum(stay, bits[alive]), bits[alive])
        now = bad[alive]
        first.append((start[alive] + at[alive])[now])
        end.append((start[alive] + until)[now])
        at[alive], bad[alive] = until, ~now
        alive = alive[until < bits[alive]]
    begins, ends = np.concatenate(first), np.concatenate(end)
    order = np.argsort(begins)
    return begins[order], ends[order]


def in_runs(rng: np.random.Generator, first: Positions, end: Positions, rate: float) -> Positions:
    """Return steps inside runs that have an event, each with probability ``rate`` for itself."""
    length = end - first
    found = independent(rng, int(length.sum()), rate)
    behind = length.cumsum()
    run = np.searchsorted(behind, found, side="right")
    events: Positions = found - (behind - length)[run] + first[run]
    return events


def bursts(rng: np.random.Generator, bits: NDArray[np.int64], to_bad: float, to_good: float, wrong: float,
           wrong_in_good: float = 0.0, *, fresh: bool = False) -> Positions:
    """Return the bits that a two-state channel makes wrong.

    wrong, wrong_in_good  error probability of a bit in the bad and in the good state
    fresh                 the state begins anew, stationary, with every frame; else it runs on
    Error rate: (p wrong + r wrong_in_good) / (p + r).
    Source: Elliott (1963), Bell Syst. Tech. J. 42:1977-1997.
    """
    steps = int(bits.sum())
    first, end = (fresh_bad_runs(rng, bits, to_bad, to_good) if fresh
                  else bad_runs(rng, steps, to_bad, to_good))
    inside = in_runs(rng, first, end, wrong)
    if wrong_in_good <= 0:
        return inside
    outside = in_runs(rng, np.append(0, end), np.append(first, steps), wrong_in_good)
    return np.sort(np.concatenate([inside, outside]))


def periodic(rng: np.random.Generator, bits: NDArray[np.int64], start: NDArray[np.int64], bit_rate: float,
             every: float, length: int, wrong: float) -> Positions:
    """Return the bits that a periodic disturber makes wrong, such as the switching edges of a drive.

    start     int64 (frame,)  when the first bit of each frame is sent, ns
    bit_rate  bit/s on the air
    every     s from one disturbance to the next; they stand at whole multiples of it since time 0
    length    bits that each touches, from the bit being sent when it begins
    wrong     probability that a bit so touched is wrong
    """
    bit, period = 1e9 / bit_rate, every * 1e9
    longest = int(bits.max(initial=0))
    edges = np.arange(int((longest + length) * bit / period) + 2)
    before = bits.cumsum() - bits
    parts = [NONE]
    at_once = max(TOUCHES // (len(edges) * length), 1)
    for i in range(0, len(bits), at_once):
        some = slice(i, i + at_once)
        first = start[some] - int(length * bit)                     # the earliest edge that still touches
        since = start[some] - np.ceil(first / period) * period      # from that edge to the frame's start
        at = np.floor((edges * period - since[:, None]) / bit).astype(np.int64)
        touched = (at[:, :, None] + np.arange(length)).reshape(len(at), -1)
        inside = (touched >= 0) & (touched < bits[some, None])
        parts.append(np.unique((touched + before[some, None])[inside]))
    found = np.concatenate(parts)
    return found[rng.random(len(found)) < wrong]


def lost(rng: np.random.Generator, frames: int, rate: float, mean_run: float | None = None
         ) -> NDArray[np.bool_]:
    """Return which frames are lost: bool (frame,).

    mean_run  None: each for itself; else two states with every frame lost in the bad one, so that
              runs of lost frames have this mean, r = 1 / mean_run and p = r rate / (1 - rate)
    """
    out = np.zeros(frames, np.bool_)
    if mean_run is None or not 0 < rate < 1:
        out[independent(rng, frames, rate)] = True
        return out
    to_good = 1 / mean_run
    for first, end in zip(*bad_runs(rng, frames, rate * to_good / (1 - rate), to_good), strict=True):
        out[first:end] = True
    return out
