"""Steps that say where a frame begins and ends: sync word, length, padding."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal
from published import bits, hex_bits, text

from pcaptool.coding.chain import Chain
from pcaptool.coding.interleave import Interleave
from pcaptool.coding.length import Length
from pcaptool.coding.pad import Pad
from pcaptool.coding.step import CHECK_FAILED, OK, SHORT, Batch, LengthError, ParameterError
from pcaptool.coding.sync import Sync


def rows(decoded) -> list[str]:
    """Return the data of every frame, cut to its length."""
    n = decoded.bits.shape[1]
    lengths = [n] * len(decoded.bits) if decoded.length is None else decoded.length
    return [text(row[:n]) for row, n in zip(decoded.bits, lengths, strict=True)]


def sides(decoded) -> list[str]:
    return [text(row[:n]) for row, n in zip(decoded.side, decoded.side_length, strict=True)]


WORD = "11100010010"                            # the 11-bit code of Barker (1953)


def test_sync_word_is_found_behind_other_bits_with_wrong_bits_in_it():
    step = Sync(word="0b" + WORD, tolerate=2, within=4)
    frames = [WORD + "1011" + "1011", "0110" + WORD + "1011", "01" + "11000010010" + "101111",
              "0" + "01100010010" + "1000001"]
    decoded = step.decode(Batch(np.concatenate([bits(f) for f in frames])))
    assert decoded.fault.tolist() == [OK] * 4
    assert rows(decoded) == ["10111011", "1011", "101111", "1000001"]
    assert sides(decoded) == ["", "0110", "01", "0"]
    assert decoded.repaired.tolist() == [0, 0, 1, 1]


def test_sync_word_takes_the_best_place_and_then_the_earliest():
    step = Sync(word="0b1111100", tolerate=2, within=12)
    decoded = step.decode(Batch(bits("1101100" "1111100" "01")))
    assert sides(decoded) == ["1101100"] and decoded.repaired == [0]
    decoded = step.decode(Batch(bits("1101100" "1111000" "01")))
    assert decoded.side is None and decoded.repaired == [1]
    assert rows(decoded) == ["111100001"]


def test_without_a_sync_word_data_are_read_from_the_begin_and_the_check_fails():
    step = Sync(word="1ACFFC1D", tolerate=3, within=8)
    decoded = step.decode(Batch(np.zeros((2, 48), np.uint8)))
    assert decoded.fault.tolist() == [CHECK_FAILED] * 2
    assert decoded.bits.shape == (2, 16) and decoded.length is None
    assert not decoded.repaired.any()


def test_a_frame_shorter_than_the_sync_word_is_short():
    assert Sync(word="1ACFFC1D").decode(Batch(np.zeros((1, 31), np.uint8))).fault == [SHORT]
    with pytest.raises(LengthError):
        Sync(word="1ACFFC1D").data_bits(31)


@settings(derandomize=True, deadline=None, max_examples=40)
@given(st.data())
def test_sync_finds_what_a_plain_search_finds(data):
    word = data.draw(st.lists(st.integers(0, 1), min_size=5, max_size=9))
    tolerate, within = data.draw(st.integers(0, (len(word) - 1) // 2)), data.draw(st.integers(0, 20))
    frames = np.random.default_rng(data.draw(st.integers(0, 99))).integers(0, 2, (20, 24), np.uint8)
    step = Sync(word="0b" + "".join(map(str, word)), tolerate=tolerate, within=within)
    decoded = step.decode(Batch(frames))
    for i, frame in enumerate(frames.tolist()):
        wrong = [sum(a != b for a, b in zip(frame[p:], word, strict=False))
                 for p in range(min(within, 24 - len(word)) + 1)]
        found = min(wrong) <= tolerate
        place = wrong.index(min(wrong)) if found else 0
        assert rows(decoded)[i] == text(frame[place + len(word) :])
        assert decoded.fault[i] == (OK if found else CHECK_FAILED)
        assert decoded.repaired[i] == (min(wrong) if found else 0)


@pytest.mark.parametrize(("keys", "key"), [
    ({"word": ""}, "word"), ({"word": "0b"}, "word"), ({"word": "0b12"}, "word"), ({"word": "xyz"}, "word"),
    ({"word": "FF", "tolerate": 4}, "tolerate"),
])
def test_impossible_sync_words_name_the_key(keys, key):
    with pytest.raises(ParameterError) as caught:
        Sync(**keys)
    assert caught.value.key == key


def test_length_counts_units_and_more_in_either_order():
    assert_array_equal(Length(bits=8, plus=2).encode(hex_bits("aabbcc")), hex_bits("05aabbcc"))
    assert_array_equal(Length(bits=16, order="little").encode(hex_bits("aabbcc")), hex_bits("0300aabbcc"))
    assert_array_equal(Length(bits=4, unit=1).encode(bits("101")), bits("0011101"))


def test_length_cuts_the_data_and_keeps_the_rest_aside():
    step = Length(bits=8, plus=1)
    frames = np.concatenate([hex_bits(f) for f in ("03aabbcc", "01aabbcc", "04aabbcc", "05aabbcc", "00aabbcc")])
    decoded = step.decode(Batch(frames))
    assert decoded.fault.tolist() == [OK, OK, OK, SHORT, SHORT]
    assert rows(decoded)[:3] == [text(hex_bits(d)[0]) for d in ("aabb", "", "aabbcc")]
    assert sides(decoded)[:3] == [text(hex_bits(d)[0]) for d in ("cc", "aabbcc", "")]
    assert step.decode(Batch(np.zeros((1, 7), np.uint8))).fault == [SHORT]


@pytest.mark.parametrize("k", [4, 256 * 8])
def test_a_length_that_the_field_cannot_hold_is_refused(k):
    with pytest.raises(LengthError):
        Length(bits=8).encode(np.zeros((1, k), np.uint8))


def test_little_order_needs_whole_octets():
    with pytest.raises(ParameterError, match="order"):
        Length(bits=12, order="little")


@pytest.mark.parametrize(("keys", "sent"), [
    ({"bits": 3}, "1011000"), ({"bits": 3, "value": 5}, "1011101"), ({"bits": 2, "value": 2, "at": "start"}, "101011"),
    ({"to": 6}, "101100"), ({"to": 6, "value": 1}, "101111"), ({"to": 4}, "1011"),
])
def test_pad_bits_stand_where_they_should(keys, sent):
    assert text(Pad(**keys).encode(bits("1011"))[0]) == sent


def test_ignored_pad_bits_are_given_back():
    step = Pad(bits=3, ignored=True)
    decoded = step.decode(Batch(bits("1011110")))
    assert rows(decoded) == ["1011"]
    assert text(step.encode(decoded.bits, side=decoded.side)[0]) == "1011110"
    assert Pad(bits=3).decode(Batch(bits("1011110"))).side is None


def test_padding_to_a_multiple_is_cut_off_by_the_length_inside_it():
    chain = Chain((Length(bits=8), Pad(to=48), Interleave(rows=6, columns=8)))
    for octets in (0, 3, 5, 6, 11):
        message = np.random.default_rng(octets).integers(0, 2, (2, octets * 8), np.uint8)
        air = chain.encode(message)
        assert air.shape[1] % 48 == 0
        outcome = chain.decode(air)
        assert outcome.reason.tolist() == [OK, OK] and outcome.wrong_bits.tolist() == [0, 0]
        assert [text(m[:n]) for m, n in zip(outcome.message, outcome.length, strict=True)] == [
            text(m) for m in message]


@pytest.mark.parametrize(("keys", "key"), [
    ({}, "bits"), ({"bits": 1, "to": 8}, "bits"), ({"bits": 2, "value": 4}, "value"), ({"to": 8, "value": 2}, "value"),
    ({"to": 8, "at": "start"}, "to"), ({"to": 8, "ignored": True}, "to"),
])
def test_impossible_padding_names_the_key(keys, key):
    with pytest.raises(ParameterError) as caught:
        Pad(**keys)
    assert caught.value.key == key
