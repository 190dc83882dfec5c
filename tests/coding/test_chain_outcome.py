"""Reasons, verified corrections and channel errors of whole chains, worked by hand."""

import numpy as np

from pcaptool.coding.chain import REASONS, Chain
from pcaptool.coding.crc import Crc
from pcaptool.coding.hamming import Hamming
from pcaptool.coding.pad import Pad
from pcaptool.coding.repeat import Repeat
from pcaptool.coding.sync import Sync

RNG = np.random.default_rng(6)


def outcome(chain, flips, bits=16):
    message = RNG.integers(0, 2, (1, bits), np.uint8)
    air = chain.encode(message)
    air[0, list(flips)] ^= 1
    return chain.decode(air), message


def reason(o):
    return REASONS[int(o.reason[0])]


def test_an_undamaged_frame_has_no_errors():
    o, message = outcome(Chain((Crc(standard="ccsds"), Hamming(n=12, k=8))), [])
    assert reason(o) == "" and o.wrong_bits[0] == 0 and o.headroom[0] == 1
    np.testing.assert_array_equal(o.message, message)


def test_one_error_in_each_word_is_corrected_and_located():
    o, message = outcome(Chain((Crc(standard="ccsds"), Hamming(n=12, k=8))), [0, 15, 40])
    assert reason(o) == "" and o.error_position.tolist() == [0, 15, 40] and o.headroom[0] == 0
    np.testing.assert_array_equal(o.message, message)


def test_a_check_that_disagrees_behind_a_decoder_is_a_miscorrection():
    """Errors at positions 1, 2 and 3 of a word have syndrome 0: it looks right and only the CRC knows;
    an error elsewhere is repaired, so the decoder claimed success."""
    o, _ = outcome(Chain((Crc(standard="ccsds"), Hamming(n=12, k=8))), [0, 1, 2, 20])
    assert reason(o) == "miscorrected" and o.wrong_bits[0] == -1


def test_a_check_that_fails_without_any_repair_is_just_failed():
    o, _ = outcome(Chain((Crc(standard="ccsds"), Hamming(n=12, k=8))), [0, 1, 2])
    assert reason(o) == "check_failed"


def test_a_double_error_of_an_extended_code_is_uncorrectable():
    o, _ = outcome(Chain((Hamming(n=13, k=8, extended=True),)), [0, 5])
    assert reason(o) == "uncorrectable"


def test_a_check_outside_the_decoder_is_judged_after_correction():
    chain = Chain((Hamming(n=12, k=8), Crc(standard="ccsds")))
    o, message = outcome(chain, [3])
    assert reason(o) == "" and o.error_position.tolist() == [3]
    o, _ = outcome(chain, [24])         # a wrong bit of the CRC itself
    assert reason(o) == "check_failed"


def test_a_missing_sync_word_stays_a_failed_check_whatever_is_repaired_inside():
    o, _ = outcome(Chain((Hamming(n=12, k=8), Sync(word="A5"))), [0, 1, 10])
    assert reason(o) == "check_failed"


def test_wrong_sync_and_pad_bits_are_channel_errors_of_a_usable_frame():
    o, _ = outcome(Chain((Crc(standard="ccsds"), Pad(bits=4), Sync(word="A5C3", tolerate=2))), [1, 16 + 32 + 2])
    assert reason(o) == "" and o.error_position.tolist() == [1, 50]


def test_ignored_bits_are_never_errors():
    o, _ = outcome(Chain((Crc(standard="ccsds"), Pad(bits=4, ignored=True), Repeat(times=3))), [32 * 3, 32 * 3 + 1])
    assert reason(o) == "" and o.wrong_bits[0] == 1     # two copies of three outvote the third


def test_frames_of_different_length_in_one_batch():
    chain = Chain((Crc(standard="ccsds"),))
    a, b = RNG.integers(0, 2, (1, 8), np.uint8), RNG.integers(0, 2, (1, 24), np.uint8)
    air = np.zeros((3, 40), np.uint8)
    air[0, :24], air[1, :40], air[2, :5] = chain.encode(a), chain.encode(b), 1
    o = chain.decode(air, np.array([24, 40, 5]))
    assert [REASONS[int(r)] for r in o.reason] == ["", "", "short"]
    assert o.length.tolist()[:2] == [8, 24]
    np.testing.assert_array_equal(o.message[1], b[0])
