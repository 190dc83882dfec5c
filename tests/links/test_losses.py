"""Losses split into air, backhaul and undecided, by hand-worked cases."""

import numpy as np
import pytest

from pcaptool.links.losses import clusters, split_losses


def split(gaps, events, dropped=False, several=False):
    """gaps: (gateway, begin, end, lost); events: (gateway, begin, end, lost)."""
    g = np.array(gaps, np.int64).reshape(-1, 4)
    e = np.array(events, np.int64).reshape(-1, 4)
    out = split_losses(g[:, 0], g[:, 1], g[:, 2], g[:, 3], e[:, 0], e[:, 1], e[:, 2], e[:, 3],
                       np.full(len(e), dropped), np.full(len(g), several))
    return list(zip(out.air.tolist(), out.backhaul.tolist(), out.undecided.tolist(), strict=True))


@pytest.mark.parametrize(("gaps", "events", "expected", "why"), [
    ([(-1, 0, 10, 3)], [], [(0, 0, 3)], "no backhaul counter: nobody can tell"),
    ([(0, 0, 10, 3)], [], [(3, 0, 0)], "the gateway's counter is whole: lost on the air"),
    ([(0, 0, 10, 3)], [(0, 2, 4, 3)], [(0, 3, 0)], "the backhaul lost as many"),
    ([(0, 0, 10, 3)], [(0, 2, 4, 1)], [(2, 1, 0)], "one on the backhaul, two on the air"),
    ([(0, 0, 10, 1), (0, 1, 11, 1)], [(0, 2, 4, 2)], [(0, 1, 0), (0, 1, 0)], "both explained"),
    ([(0, 0, 10, 1), (0, 1, 11, 1)], [(0, 2, 4, 1)], [(0, 0, 1), (0, 0, 1)], "one of two: whose, nothing tells"),
    ([(0, 0, 10, 5), (0, 1, 11, 1)], [(0, 2, 4, 3)], [(2, 2, 1), (0, 0, 1)], "at least two of five, at most three"),
    ([(0, 0, 10, 1)], [(0, 20, 24, 1)], [(1, 0, 0)], "a loss at another time"),
    ([(0, 0, 10, 1)], [(1, 2, 4, 1)], [(1, 0, 0)], "a loss of another gateway"),
])
def test_split_by_hand(gaps, events, expected, why):
    assert split(gaps, events) == expected, why


def test_a_missing_datagram_of_several_frames_may_have_taken_any_number():
    assert split([(0, 0, 10, 3), (0, 20, 30, 2)], [(0, 2, 4, 1)], several=True) == [(0, 0, 3), (2, 0, 0)]


def test_drops_of_the_capture_itself_leave_backhaul_losses_undecided():
    assert split([(0, 0, 10, 3)], [(0, 2, 4, 1)], dropped=True) == [(2, 0, 1)]


def test_parts_of_a_split_add_up():
    rng = np.random.default_rng(8)
    begin = np.sort(rng.integers(0, 1000, 60))
    gaps = [(int(rng.integers(-1, 2)), int(b), int(b + rng.integers(1, 40)), int(rng.integers(0, 6))) for b in begin]
    events = [(int(rng.integers(0, 2)), int(b), int(b + 3), int(rng.integers(1, 4))) for b in rng.integers(0, 1000, 30)]
    for (_, _, _, lost), parts in zip(gaps, split(gaps, events), strict=True):
        assert sum(parts) == lost and min(parts) >= 0


def test_clusters_join_what_overlaps_and_not_what_touches():
    assert clusters(np.array([0, 5, 10, 12]), np.array([6, 10, 11, 20])).tolist() == [0, 0, 1, 2]
