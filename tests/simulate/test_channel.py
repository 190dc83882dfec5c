"""Channels against published values, theory and hand-worked cases.

Every bound is 4.5 standard deviations of the count under theory (Clopper and Pearson hardly differ at
these sizes); the seeds are fixed.
"""

import json
from math import sqrt
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pcaptool.simulate import channel

PUBLISHED: list[dict[str, Any]] = json.loads(Path(__file__).with_name("published.json").read_text())
SIGMAS = 4.5


def rng(seed: int = 7) -> np.random.Generator:
    return np.random.default_rng(seed)


def near(count: int, n: int, rate: float, inflation: float = 1.0) -> bool:
    """Is a count what a rate lets expect? inflation: of the variance, by dependence of neighbours."""
    return abs(count - n * rate) <= SIGMAS * sqrt(n * rate * (1 - rate) * inflation) + 0.5


@pytest.mark.parametrize("rate", [1e-4, 0.003, 0.2, 0.9])
def test_independent_events_are_as_many_as_the_rate_says(rate: float) -> None:
    n = 400_000
    assert near(len(channel.independent(rng(), n, rate)), n, rate)


def test_independent_events_are_independent() -> None:
    n, rate = 400_000, 0.1
    hit = np.zeros(n, np.bool_)
    hit[channel.independent(rng(), n, rate)] = True
    for lag in (1, 2, 7):                   # both of a pair are hit with rate squared
        assert near(int((hit[lag:] & hit[:-lag]).sum()), n - lag, rate**2, 1 + 4 * rate)


def test_rates_nought_and_one_are_exact() -> None:
    assert len(channel.independent(rng(), 1000, 0.0)) == 0
    assert channel.independent(rng(), 1000, 1.0).tolist() == list(range(1000))
    assert len(channel.independent(rng(), 1_000_000, 1e-15)) == 0
    assert channel.lost(rng(), 5, 1.0).all() and not channel.lost(rng(), 5, 0.0).any()


def test_every_frame_has_its_own_rate() -> None:
    bits = np.tile([120, 80, 40], 4000)
    rate = np.tile([0.01, 0.0, 0.2], 4000)
    frame = np.searchsorted(bits.cumsum(), channel.independent_by_frame(rng(), bits, rate), side="right")
    for kind, (width, chance) in enumerate([(120, 0.01), (80, 0.0), (40, 0.2)]):
        assert near(int((frame % 3 == kind).sum()), 4000 * width, chance)


@pytest.mark.parametrize("case", PUBLISHED, ids=lambda c: str(c["title"]))
@pytest.mark.parametrize("fresh", [False, True])
def test_two_states_have_the_published_error_rate(case: dict[str, Any], fresh: bool) -> None:
    p, r, h, k = (case[name] for name in ("to_bad", "to_good", "wrong", "wrong_in_good"))
    bits = np.full(20_000, 120)
    n = int(bits.sum())
    found = channel.bursts(rng(), bits, p, r, h, k, fresh=fresh)
    rate, bad, memory = case["error_rate"], case["prob_bad"], 1 - p - r
    # Var of the count / n: rate (1 - rate) + 2 sum of covariances, (h - k)^2 pi_B pi_G memory^lag at each lag
    variance = rate * (1 - rate) + 2 * (h - k) ** 2 * bad * (1 - bad) * memory / (1 - memory)
    assert near(len(found), n, rate, variance / (rate * (1 - rate))), case["source"]


@pytest.mark.parametrize("case", PUBLISHED, ids=lambda c: str(c["title"]))
def test_stays_have_the_published_means(case: dict[str, Any]) -> None:
    first, end = channel.bad_runs(rng(), 4_000_000, case["to_bad"], case["to_good"])
    bad, good = end - first, first[1:] - end[:-1]
    for stays, mean in ((bad[1:-1], case["mean_stay_bad"]), (good, case["mean_stay_good"])):
        assert abs(stays.mean() - mean) < SIGMAS * sqrt(mean * (mean - 1) / len(stays)), case["source"]
        assert near(int((stays == 1).sum()), len(stays), 1 / mean)          # geometric: P(1) = 1 / mean


def test_the_state_runs_on_from_frame_to_frame_unless_fresh() -> None:
    bits = np.ones(300_000, np.int64)       # frames of one bit: fresh ones know nothing of each other
    p, r = 0.01, 0.25
    bad = p / (p + r)
    for fresh, both in ((False, bad * (1 - r)), (True, bad * bad)):
        hit = np.zeros(len(bits), np.bool_)
        hit[channel.bursts(rng(), bits, p, r, 1.0, fresh=fresh)] = True
        assert near(int((hit[1:] & hit[:-1]).sum()), len(bits) - 1, both, 9.0 if not fresh else 1.3)


@given(st.lists(st.integers(0, 50), min_size=1, max_size=30), st.floats(0, 1), st.floats(0, 1),
       st.floats(0, 1), st.floats(0, 1), st.booleans(), st.integers(0, 2**32))
def test_positions_ascend_and_lie_in_the_stream(lengths: list[int], p: float, r: float, h: float, k: float,
                                                fresh: bool, seed: int) -> None:
    bits = np.array(lengths)
    found = channel.bursts(rng(seed), bits, p, r, h, k, fresh=fresh)
    assert found.dtype == np.int64 and (np.diff(found) > 0).all()
    assert not len(found) or (found[0] >= 0 and found[-1] < bits.sum())
    first, end = channel.bad_runs(rng(seed), int(bits.sum()), p, r)
    assert (first < end).all() and (first[1:] >= end[:-1]).all()


def test_the_first_state_is_bad_as_often_as_the_state_is_bad_at_all() -> None:
    one, n = rng(), 40_000
    assert near(sum(len(channel.bad_runs(one, 1, 0.01, 0.03)[0]) for _ in range(n)), n, 0.25)


def test_a_state_that_is_never_left_is_the_only_one() -> None:
    bits = np.full(5, 8)
    assert channel.bursts(rng(), bits, 0.1, 0.0, 1.0).tolist() == list(range(40))
    assert channel.bursts(rng(), bits, 0.1, 0.0, 1.0, fresh=True).tolist() == list(range(40))
    assert len(channel.bursts(rng(), bits, 0.0, 0.1, 1.0)) == 0


def test_a_periodic_disturber_hits_the_bits_sent_when_it_begins() -> None:
    # By hand: bits of 1 ms, a disturbance of 2 bits every 10 ms from time 0. A frame of 20 bits from
    # 5 ms is hit at 10 and 20 ms: bits 5 6 and 15 16. One from 11 ms has lost the first bit of that at
    # 10 ms: bit 0, then 9 10 and 19 of that at 30 ms. One of 4 bits from 12 ms is never hit.
    bits, start = np.array([20, 20, 4]), np.array([5, 11, 12]) * 1_000_000
    found = channel.periodic(rng(), bits, start, 1000.0, 0.010, 2, 1.0)
    assert found.tolist() == [5, 6, 15, 16, 20 + 0, 20 + 9, 20 + 10, 20 + 19]


def test_a_periodic_disturber_repeats_with_its_period() -> None:
    bits, start = np.array([480]), np.array([3_300_000])
    found = channel.periodic(rng(), bits, start, 4800.0, 0.010, 6, 1.0)
    assert set((found % 48).tolist()) == {(found[0] + i) % 48 for i in range(6)}    # 10 ms are 48 bits
    assert len(found) == 60


@pytest.mark.parametrize(("rate", "mean_run"), [(0.02, None), (0.02, 1.0), (0.02, 5.0), (0.3, 20.0)])
def test_losses_have_their_rate_and_their_runs(rate: float, mean_run: float | None) -> None:
    n = 400_000
    dead = channel.lost(rng(), n, rate, mean_run)
    run = 1 / (1 - rate) if mean_run is None else mean_run
    memory = 0.0 if mean_run is None else 1 - 1 / run - rate / (run * (1 - rate))
    assert near(int(dead.sum()), n, rate, max((1 + memory) / (1 - memory), 1.0))
    edges = np.flatnonzero(np.diff(np.concatenate([[0], dead.astype(np.int8), [0]])))
    runs = edges[1::2] - edges[::2]
    assert abs(runs.mean() - run) < SIGMAS * sqrt(max(run * (run - 1), 1e-9) / len(runs)) + 1e-12
