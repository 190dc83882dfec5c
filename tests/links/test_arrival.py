"""Counters, gaps and arrivals by hand-worked cases; RFC 3550 A.1 and A.3 where the rule is theirs."""

import numpy as np
import pytest

from pcaptool.links.arrival import (
    BY_COUNTER,
    BY_TIME,
    GAP,
    IN_TURN,
    LATE,
    REPEATED,
    RESTART,
    SAMPLES,
    UNCERTAIN,
    extend,
    follow,
    new_links,
)

SECOND = 1_000_000_000


def run(counters, times=None, states=None, modulo=65536, window=16, interval=0):
    """Follow one link; times in seconds, state 0 intact, 2 corrupted."""
    n = len(counters)
    times = np.arange(n, dtype=np.float64) if times is None else np.array(times, np.float64)
    order = (times * SECOND).astype(np.int64)
    links = new_links(1, np.array([int(interval * SECOND)]))
    gaps = np.zeros(n + 1, GAP)
    state = np.zeros(n, np.uint8) if states is None else np.array(states, np.uint8)
    arrival, n_gaps = follow(
        np.zeros(n, np.int64), np.array(counters, np.int64), state, order, order, np.zeros(n, np.int32),
        np.full(n, np.nan, np.float32), np.full(n, 80, np.int32), links, np.zeros((1, window + 1), np.bool_),
        np.zeros((1, SAMPLES), np.int64), np.array([modulo]), np.array([window]), np.array([True]), gaps, 0,
        np.zeros(1, np.int64), np.zeros(0, np.int64), np.full(1, -1, np.int64))
    found = gaps[:n_gaps]
    return arrival.tolist(), links[0], [g for g in found if g["missing"] > 0]


def lost(gaps):
    return sum(int(g["missing"]) for g in gaps)


RFC_3550 = [   # sequence, extended highest, lost by A.3 where no frame is repeated
    ([65533, 65534, 65535, 0, 1, 3, 2, 5], 65541, 1, "RFC 3550 A.1 and A.3: one wrap, one reordered, one lost"),
    ([10, 11, 12, 13], 13, 0, "RFC 3550 A.3"),
    ([10, 14, 15], 15, 3, "RFC 3550 A.3: expected 6, received 3"),
    ([65530, 4, 5], 65541, 9, "RFC 3550 A.1: loss across the wrap"),
]


@pytest.mark.parametrize(("sequence", "extended", "missing", "source"), RFC_3550)
def test_loss_arithmetic_of_rfc_3550(sequence, extended, missing, source):
    _, link, gaps = run(sequence)
    assert link["extended"] == extended and lost(gaps) == missing, source


def test_a_repeat_loses_nothing_and_is_told():
    arrival, link, gaps = run([10, 11, 12, 12, 13])
    assert arrival == [IN_TURN, IN_TURN, IN_TURN, REPEATED, IN_TURN]
    assert link["repeated"] == 1 and lost(gaps) == 0


def test_a_late_frame_fills_its_gap():
    arrival, link, gaps = run([1, 2, 4, 3, 5])
    assert arrival == [IN_TURN, IN_TURN, IN_TURN, LATE, IN_TURN]
    assert link["late"] == 1 and gaps == []


def test_a_late_frame_in_a_longer_gap_leaves_the_others_missing():
    _, _, gaps = run([1, 5, 3, 6])
    assert lost(gaps) == 2


def test_a_silence_of_many_turns_is_resolved_by_time():
    """8-bit counter, one frame a second: 1000 s of silence are 3 turns and 232 frames."""
    arrival, link, gaps = run([10, 11, (11 + 1000) % 256], [0, 1, 1001], modulo=256, interval=1)
    assert arrival[-1] == IN_TURN and lost(gaps) == 999
    assert gaps[0]["resolved"] == BY_TIME


def test_a_very_long_silence_says_that_it_is_uncertain():
    _, _, gaps = run([0, 1, (1 + 30_000) % 256], [0, 1, 30_001], modulo=256, interval=1)
    assert gaps[0]["resolved"] == UNCERTAIN and lost(gaps) == 29_999


def test_a_restart_loses_nothing():
    counters = [*range(100, 130), 0, 1, 2]
    arrival, link, gaps = run(counters, modulo=256, interval=1)
    assert arrival[30] == RESTART and link["restarts"] == 1 and lost(gaps) == 0


def test_a_restart_close_behind_is_seen_at_its_second_frame():
    counters = [*range(10), 0, 1, 2, 3]
    arrival, link, gaps = run(counters, modulo=256, interval=1)
    assert link["restarts"] == 1 and RESTART in arrival[10:12] and lost(gaps) == 0


def test_without_any_interval_half_the_numbers_are_forward():
    """RFC 9187: successive values are readable only if they advance by less than half the number space."""
    _, link, gaps = run([0, 100], [0, 0], modulo=256)
    assert lost(gaps) == 99 and link["restarts"] == 0
    _, link, gaps = run([0, 200], [0, 0], modulo=256)
    assert lost(gaps) == 0 and link["restarts"] == 1


def test_corrupted_frames_heard_in_a_gap_explain_it():
    _, link, gaps = run([1, -1, -1, 5], states=[0, 2, 2, 0])
    assert lost(gaps) == 3 and gaps[0]["corrupted"] == 2 and link["corrupted"] == 2


@pytest.mark.parametrize(("counter", "extended", "elapsed", "advance", "verdict", "resolved"), [
    (5, 4, 1, 1, IN_TURN, BY_COUNTER),
    (3, 4, 1, -1, LATE, BY_COUNTER),
    (4, 4, 256, 256, IN_TURN, BY_TIME),        # a whole turn of silence
    (4, 4, 0.2, 0, LATE, BY_COUNTER),          # a repeat at once
    (0, 200, 1, 56, RESTART, BY_TIME),
])
def test_extend_by_hand(counter, extended, elapsed, advance, verdict, resolved):
    assert extend(counter, extended, 256, int(elapsed * SECOND), SECOND, 16, True) == (advance, verdict, resolved)


def test_batches_of_any_size_give_the_same():
    rng = np.random.default_rng(4)
    counters = np.cumsum(rng.choice([1, 1, 1, 1, 3, 9], 400)) % 256
    whole = run(counters.tolist(), modulo=256, interval=1)
    links, gaps, n_gaps = new_links(1, np.array([SECOND])), np.zeros(500, GAP), 0
    seen, samples, turn = np.zeros((1, 17), np.bool_), np.zeros((1, SAMPLES), np.int64), np.zeros(1, np.int64)
    arrival = []
    for at in range(0, 400, 7):
        part = counters[at : at + 7].astype(np.int64)
        order = (np.arange(at, at + len(part)) * SECOND).astype(np.int64)
        n = len(part)
        a, n_gaps = follow(np.zeros(n, np.int64), part, np.zeros(n, np.uint8), order, order, np.zeros(n, np.int32),
                           np.full(n, np.nan, np.float32), np.full(n, 80, np.int32), links, seen, samples,
                           np.array([256]), np.array([16]), np.array([True]), gaps, n_gaps, turn,
                           np.zeros(0, np.int64), np.full(1, -1, np.int64))
        arrival += a.tolist()
    assert arrival == whole[0]
    assert [g.tolist() for g in gaps[:n_gaps] if g["missing"] > 0] == [g.tolist() for g in whole[2]]
