"""Intervals of rates against printed examples and by simulation."""

import numpy as np
import pytest

from pcaptool.links.rates import effective_count, rate_interval, wilson


def two_state(rng, n, p, r):
    """A two-state chain in its stationary distribution, one step at a time; True is lost."""
    chance, state, out = rng.random(n), rng.random() < p / (p + r), np.zeros(n, np.bool_)
    for i in range(n):
        state = chance[i] >= r if state else chance[i] < p
        out[i] = state
    return out


NEWCOMBE = [    # Newcombe (1998), Statist. Med. 17:857-872, table I, method 3
    (81, 263, 0.2553, 0.3662), (0, 20, 0.0, 0.1611),
]


@pytest.mark.parametrize(("x", "n", "low", "high"), NEWCOMBE)
def test_wilson_equals_the_printed_interval(x, n, low, high):
    assert wilson(x / n * n, n) == pytest.approx((low, high), abs=5e-5)


def test_the_effective_count_of_a_two_state_trace_follows_its_correlation():
    """p = 0.01, r = 0.25: L = 0.74, n_eff = n * 0.26 / 1.74 (the formula, worked by hand)."""
    n, runs = 100_000, 1000
    events = 4 * runs
    p, r = runs / (n - events), 1 / 4
    expected = n * (p + r) / (2 - p - r)
    assert effective_count(n, events, runs) == pytest.approx(expected)


def test_independent_losses_keep_their_count():
    assert effective_count(1000, 0, 0) == 1000
    assert effective_count(1000, 10, 10) == pytest.approx(1000, rel=0.01)


@pytest.mark.parametrize("burst", [1, 2, 5, 20])
def test_the_interval_covers_the_true_rate_also_for_losses_in_runs(burst):
    """Nominal 95 %; the plain interval would cover 24 % at a mean burst of 20."""
    rng = np.random.default_rng(21)
    rate, n, covered, runs = 0.02, 20_000, 0, 200
    r = 1 / burst
    p = rate * r / (1 - rate)
    for _ in range(runs):
        bad = two_state(rng, n, p, r)
        starts = int(bad[0]) + int((bad[1:] & ~bad[:-1]).sum())
        low, high = rate_interval(int(bad.sum()), n, starts)
        covered += low <= rate <= high
    assert 0.90 <= covered / runs <= 0.99      # 95 % less and more three standard errors of 200 runs
