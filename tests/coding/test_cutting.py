"""Frames in long rows: HDLC between flags, fixed frames behind sync words, slips, missed words, aborts."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal
from published import bits, text

from pcaptool.coding.bit_stuffing import BitStuffing
from pcaptool.coding.step import OK, SHORT, Batch, ParameterError
from pcaptool.coding.sync import Sync

FLAG = "01111110"


def find(step, *rows):
    width = max(len(r) for r in rows)
    table = np.zeros((len(rows), width), np.uint8)
    for i, row in enumerate(rows):
        table[i, : len(row)] = [int(c) for c in row]
    row, begin, end = step.find(table, np.array([len(r) for r in rows]))
    return list(zip(row.tolist(), begin.tolist(), end.tolist(), strict=True))


def test_stuffing_by_hand():
    """ISO/IEC 13239, 4.3: a 0 behind five ones, also where a 0 follows anyway."""
    step = BitStuffing(least=8)
    data = "1111101111110001"
    air = FLAG + "111110" + "0" + "111110" + "1" + "0001" + FLAG
    assert text(step.encode(bits(data))[0]).startswith(air)
    out = step.decode(Batch(bits("10110" + air + "0011")))
    assert text(out.bits[0, : out.length[0]]) == data and out.fault[0] == OK
    side = out.side[:1, : out.side_length[0]]
    assert text(step.encode(bits(data), side=side)[0]) == "10110" + air + "0011"


def test_flags_are_shared_repeated_and_share_their_zero():
    step = BitStuffing(least=8)
    one, two = "10101010", "00110011"
    row = "11" + FLAG + one + FLAG + two + FLAG + FLAG + FLAG[:-1] + FLAG + one + FLAG
    found = find(step, row)
    assert [row[b:e] for _, b, e in found] == [FLAG + one + FLAG, FLAG + two + FLAG, FLAG + one + FLAG]
    for _, b, e in found:
        assert step.decode(Batch(bits(row[b:e]))).fault[0] == OK


def test_aborted_and_short_and_unfinished_frames_are_left_out():
    step = BitStuffing(least=8)
    row = FLAG + "1010" + "11111111" + "0" + FLAG + "0101" + FLAG + "10101010" + FLAG + "0000000000000"
    assert [row[b:e] for _, b, e in find(step, row)] == [FLAG + "10101010" + FLAG]
    assert step.decode(Batch(bits("0" * 40))).fault[0] == SHORT
    assert step.decode(Batch(bits(FLAG + "10101010"))).fault[0] == SHORT


@settings(max_examples=60, deadline=None)
@given(st.lists(st.lists(st.booleans(), min_size=16, max_size=60), min_size=1, max_size=6), st.integers(1, 3),
       st.sampled_from(["", "1", "111", "0", "10101"]))
def test_any_frames_in_a_row_come_back(frames, flags, before):
    step = BitStuffing(opening=flags)
    row, sent = before, []
    for frame in frames:
        data = np.array([frame], np.uint8)
        word = text(step.encode(data)[0])
        size = BitStuffing(opening=1)
        stuffed = text(size.encode(data)[0])
        out = step.decode(Batch(bits(stuffed)))
        row += word[: 8 * flags] + stuffed[8 : len(stuffed) - int(out.side_length[0] - 32)]
        sent.append("".join(str(int(b)) for b in frame))
    found = find(step, row)
    got = []
    for _, b, e in found:
        out = step.decode(Batch(bits(row[b:e])))
        got.append(text(out.bits[0, : out.length[0]]))
    assert got == sent


WORD = "11100010010"     # Barker code of eleven bits
STREAM = Sync(word="0b" + WORD, tolerate=1, every=40, slip=1, flywheel=1)


def stream(rng, n):
    """Frames of 40 bits whose data hold no zero run of the sync word: alternating bits."""
    return [WORD + "".join(rng.choice(["01", "10"]) for _ in range(14)) + "0" for _ in range(n)]


def test_frames_of_a_stream_follow_in_lock():
    frames = stream(np.random.default_rng(1), 5)
    row = "0101" + "".join(frames)
    assert [b for _, b, _ in find(STREAM, row)] == [4, 44, 84, 124, 164]
    assert all(e - b == 40 for _, b, e in find(STREAM, row))
    assert find(STREAM, row[:100], "", row) [:2] == find(STREAM, row[:100])
    assert [r for r, *_ in find(STREAM, row[:100], "", row)] == [0, 0, 2, 2, 2, 2, 2]


def test_a_missed_sync_word_is_bridged_but_not_two():
    frames = stream(np.random.default_rng(2), 6)
    bad = "00000000000" + frames[2][11:]
    row = "".join(frames[:2] + [bad] + frames[3:])
    assert [b for _, b, _ in find(STREAM, row)] == [0, 40, 80, 120, 160, 200]
    out = STREAM.decode(Batch(bits(bad)))
    assert out.fault[0] == OK and out.repaired[0] == WORD.count("1")
    two = "".join(frames[:2] + [bad, bad] + frames[4:])
    assert [b for _, b, _ in find(STREAM, two)] == [0, 40, 160, 200]


@pytest.mark.parametrize("slip", [-1, 1])
def test_a_bit_slip_moves_the_lock(slip):
    frames = stream(np.random.default_rng(3), 6)
    row = "".join(frames[:3])
    row = row[:-1] if slip < 0 else row + "0"
    row += "".join(frames[3:])
    assert [b for _, b, _ in find(STREAM, row)] == [0, 40, 80, 120 + slip, 160 + slip, 200 + slip]


def test_a_sync_word_in_the_data_is_not_believed_when_none_follows():
    frames = stream(np.random.default_rng(4), 4)
    frames[0] = frames[0][:15] + WORD + frames[0][26:]
    row = "".join(frames)[11:]              # begins behind the first true sync word
    assert [b for _, b, _ in find(STREAM, row)] == [29, 69, 109]


@pytest.mark.parametrize("flywheel", [0, 1, 3])
def test_a_false_word_near_the_end_of_a_row_costs_no_true_frame(flywheel):
    step = Sync(word="0b" + WORD, tolerate=1, every=40, flywheel=flywheel)
    row = "01" * 3 + WORD + "01" * 3 + "".join(stream(np.random.default_rng(6), 3))
    assert [b for _, b, _ in find(step, row)] == [23, 63, 103]


def test_frames_on_trust_give_way_to_true_ones_behind_a_gap():
    step = Sync(word="0b" + WORD, tolerate=1, every=40, flywheel=2)
    frames = stream(np.random.default_rng(7), 5)
    row = "".join(frames[:3]) + "01" * 9 + "".join(frames[3:])
    assert [b for _, b, _ in find(step, row)] == [0, 40, 80, 138, 178]


def test_the_last_frame_is_given_out_only_when_whole():
    row = "".join(stream(np.random.default_rng(5), 3))
    assert [b for _, b, _ in find(STREAM, row[:-1])] == [0, 40]


@pytest.mark.parametrize(("keys", "words"), [({"every": 12, "slip": 1}, "more than 13"), ({"slip": 1}, "distance")])
def test_parameters_that_cannot_work_are_told(keys, words):
    with pytest.raises(ParameterError, match=words):
        Sync(word="0b" + WORD, **keys)


def test_steps_that_do_not_cut_say_so():
    assert not Sync(word="2DD4").cuts and STREAM.cuts
    assert_array_equal(find(BitStuffing(), "0" * 50), [])
