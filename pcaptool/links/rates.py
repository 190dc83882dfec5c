"""Rates with their uncertainty."""

from math import sqrt

Z_95 = 1.959963984540054        # two-sided 95 % point of the normal distribution


def wilson(count: float, n: float) -> tuple[float, float]:
    """Return the 95 % score interval of a proportion; (0, 1) without observations.

    Source: Wilson (1927); Newcombe (1998), Statist. Med. 17:857-872, method 3.
    """
    if n <= 0:
        return 0.0, 1.0
    p, zz = count / n, Z_95 * Z_95
    middle = (2 * n * p + zz) / (2 * (n + zz))
    half = Z_95 * sqrt(zz + 4 * n * p * (1 - p)) / (2 * (n + zz))
    return max(0.0, middle - half), min(1.0, middle + half)


def effective_count(n: int, events: int, runs: int) -> float:
    """Return n_eff = n (1 - L) / (1 + L), L the lag-one correlation of a two-state trace.

    n       frames
    events  of them in the bad state (lost, say)
    runs    runs of consecutive events
    L is 1 - p - r with p = runs / (n - events) and r = runs / events, the transition rates of the
    trace itself; a negative L is taken as 0, so n_eff never exceeds n.
    """
    if events <= 0 or runs <= 0 or events >= n:
        return float(n)
    correlation = max(0.0, 1 - runs / (n - events) - runs / events)
    return n * (1 - correlation) / (1 + correlation)


def rate_interval(events: int, n: int, runs: int) -> tuple[float, float]:
    """Return the 95 % interval of events / n, widened for events that come in runs."""
    if n <= 0:
        return 0.0, 1.0
    effective = effective_count(n, events, runs)
    return wilson(events / n * effective, effective)
