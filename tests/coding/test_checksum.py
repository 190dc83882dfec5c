"""Arithmetic checks: published values, zlib on random input."""

import zlib

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal
from published import bits, entries, hex_bits

from pcaptool.coding.checksum import Checksum
from pcaptool.coding.step import CHECK_FAILED, OK, SHORT, Batch, LengthError, ParameterError

KEYS = {
    "internet": {"kind": "internet"}, "fletcher16": {"kind": "fletcher16"},
    "fletcher32_le16": {"kind": "fletcher32", "words": "little"}, "adler32": {"kind": "adler32"},
    "lrc_twos_complement": {"kind": "negative-sum8"}, "sum8": {"kind": "sum8"}, "xor8": {"kind": "xor8"},
    "fletcher16_check_octets": {"kind": "iso-fletcher"},
}


@pytest.mark.parametrize("entry", entries("checksum"))
def test_checksum_equals_the_published_value(entry):
    step = Checksum(**KEYS[entry["params"]["algorithm"]])
    expected = hex_bits(entry["input_hex"] + entry["expected"].removeprefix("0x"))
    assert_array_equal(step.encode(hex_bits(entry["input_hex"])), expected, entry["source"])


@settings(derandomize=True, deadline=None, max_examples=30)
@given(st.binary(max_size=300))
def test_adler32_equals_zlib(data):
    sent = Checksum(kind="adler32").encode(hex_bits(data.hex()))
    assert int.from_bytes(np.packbits(sent[0, -32:]).tobytes()) == zlib.adler32(data)


@settings(derandomize=True, deadline=None, max_examples=30)
@given(st.binary(max_size=40))
def test_iso_check_octets_make_both_sums_zero(data):
    sent = np.packbits(Checksum(kind="iso-fletcher").encode(hex_bits(data.hex()))[0]).tolist()
    c0 = c1 = 0
    for octet in sent:                          # ISO 8473: two running sums modulo 255
        c0 = (c0 + octet) % 255
        c1 = (c1 + c0) % 255
    assert (c0, c1) == (0, 0)


@settings(derandomize=True, deadline=None, max_examples=30)
@given(st.binary(min_size=1, max_size=40))
def test_fletcher8_is_two_running_sums_modulo_15(data):
    c0 = c1 = 0
    for octet in data:
        for nibble in (octet >> 4, octet & 15):
            c0 = (c0 + nibble) % 15
            c1 = (c1 + c0) % 15
    sent = np.packbits(Checksum(kind="fletcher8").encode(hex_bits(data.hex()))[0])
    assert sent[-1] == c1 << 4 | c0


def test_little_order_swaps_the_check_octets():
    big = np.packbits(Checksum(kind="sum16").encode(hex_bits("0102ff03")))
    little = np.packbits(Checksum(kind="sum16", order="little").encode(hex_bits("0102ff03")))
    assert big[-2:].tolist() == [0x00, 0x05] and little[-2:].tolist() == [0x05, 0x00]   # 0102 + ff03


def test_parity_bit_per_word():
    step = Checksum(kind="even-parity", every_bits=7)
    word = step.encode(bits("1010101" "1110000" "110"))
    assert_array_equal(word, bits("10101010" "11100001" "1100"))
    assert_array_equal(Checksum(kind="odd-parity", every_bits=7).encode(bits("1010101")), bits("10101011"))
    bad = word.copy()
    bad[0, 9] ^= 1
    assert step.decode(Batch(np.concatenate([word, bad]))).fault.tolist() == [OK, CHECK_FAILED]
    assert_array_equal(step.decode(Batch(word)).bits, bits("1010101" "1110000" "110"))
    with pytest.raises(LengthError):
        step.data_bits(17)                      # two words and a parity bit of nothing
    assert step.decode(Batch(np.zeros((1, 17), np.uint8))).fault == [SHORT]


def test_only_parity_and_exclusive_or_are_linear():
    assert Checksum(kind="xor8").linear and Checksum(kind="odd-parity").linear
    assert not Checksum(kind="internet").linear and not Checksum(kind="sum8").linear


@pytest.mark.parametrize("keys", [
    {"kind": "sum8", "every_bits": 7}, {"kind": "even-parity", "every_bits": 7, "every": 2},
])
def test_impossible_parameters_name_the_key(keys):
    with pytest.raises(ParameterError) as caught:
        Checksum(**keys)
    assert caught.value.key == "every_bits"
