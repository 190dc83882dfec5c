"""Steps that mask or move bits: whitening, interleaving, bit order. Published sequences and permutations."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal
from published import bits, entries, hex_bits, text

from pcaptool.coding.bit_order import BitOrder
from pcaptool.coding.bits import unpack_rows
from pcaptool.coding.interleave import Interleave
from pcaptool.coding.step import SHORT, Batch, LengthError, ParameterError
from pcaptool.coding.whiten import Whiten


def whiten_of(params, **keys) -> Whiten:
    """Return the step for a published recurrence s[t] = sum of s[t - d] over the delays d."""
    if "delays" not in params:                  # Bluetooth LE: a Galois register, its channel in the seed
        return Whiten(poly="x^7 + x^4 + 1", form="galois", seed=1 << 6 | params["channel"], pack="lsb")
    degree = max(params["delays"])
    terms = [f"x^{degree - d}" for d in params["delays"] if d != degree]
    start = params.get("first_bits") or params["history"]
    return Whiten(poly=" + ".join([f"x^{degree}", *terms, "1"]), seed=int(start, 2),
                  form="history" if "history" in params else "first bits", pack=params["pack"],
                  skip_sequence=params.get("skip_bits", 0), invert=params.get("invert", False), **keys)


@pytest.mark.parametrize("entry", entries("lfsr"))
def test_the_sequence_equals_the_published_one(entry):
    zeros = np.zeros((1, entry["params"]["length_octets"] * 8), np.uint8)
    assert_array_equal(whiten_of(entry["params"]).encode(zeros), hex_bits(entry["expected"]), entry["source"])


@pytest.mark.parametrize("entry", entries("whiten"))
def test_the_whitened_octets_equal_the_published_ones(entry):
    got = whiten_of(entry["params"]).encode(hex_bits(entry["input_hex"]))
    assert_array_equal(got, hex_bits(entry["expected"]), entry["source"])


def test_reciprocal_reverses_the_polynomial():
    a = Whiten(poly="x^15 + x^14 + 1", reciprocal=True, seed=0b100101010000000, form="history")
    assert_array_equal(a.encode(np.zeros((1, 40), np.uint8)), hex_bits("03f6083430"))   # EN 300 421, 4.4.1


@pytest.mark.parametrize("poly", ["x^9 + x^5 + 1", "1+x**5+x**9", 0b10_0010_0001])
def test_a_polynomial_is_text_or_a_number(poly):
    got = Whiten(poly=poly, seed=0x1FF).encode(hex_bits("61626364"))
    assert_array_equal(got, hex_bits("9ee5db3d"))


def test_a_fixed_sequence_repeats_and_skips():
    assert text(Whiten(sequence="F0", skip=3).encode(np.zeros((1, 16), np.uint8))[0]) == "0001111000011110"


@pytest.mark.parametrize("form", ["first bits", "history", "galois"])
def test_a_seed_from_the_wrapper_is_the_seed(form):
    step = Whiten(poly="x^7 + x^4 + 1", form=form, seed=0x40, seed_from="wrapper.channel", invert=True, skip=3)
    assert step.needs == ("channel",)
    channel = np.array([37, 0, 12, 37, 39])
    data = np.random.default_rng(5).integers(0, 2, (5, 61), np.uint8)
    word = step.encode(data, {"channel": channel})
    for row, value in enumerate(channel):
        alone = Whiten(poly="x^7 + x^4 + 1", form=form, seed=0x40 ^ int(value), invert=True, skip=3)
        assert_array_equal(word[row : row + 1], alone.encode(data[row : row + 1]))
    assert_array_equal(step.decode(Batch(word), {"channel": channel}).bits, data)


@pytest.mark.parametrize(("keys", "key"), [
    ({}, "poly"), ({"poly": "x^9 + y", "seed": 1}, "poly"), ({"poly": "x^9 + x^5", "seed": 1}, "poly"),
    ({"poly": "x^99 + 1", "seed": 1}, "poly"), ({"poly": "x^9 + x^5 + 1"}, "seed"),
    ({"poly": "x^9 + x^5 + 1", "seed": 512}, "seed"), ({"sequence": "F"}, "sequence"),
    ({"sequence": "FF", "poly": "x + 1"}, "sequence"), ({"poly": "x + 1", "seed_from": "unit"}, "seed_from"),
])
def test_impossible_whitening_names_the_key(keys, key):
    with pytest.raises(ParameterError) as caught:
        Whiten(**keys)
    assert caught.value.key == key


@pytest.mark.parametrize("entry", entries("interleave_block"))
def test_the_block_interleaver_equals_the_published_one(entry):
    step = Interleave(rows=entry["params"]["rows"], columns=entry["params"]["cols"], unit=8)
    assert_array_equal(step.encode(hex_bits(entry["input_hex"])), hex_bits(entry["expected"]))


@pytest.mark.parametrize("entry", entries("interleave_permutation"))
def test_the_permutation_equals_the_published_one(entry):
    depth, n = entry["params"]["depth"], entry["params"]["n"]
    number = np.arange(n, dtype=np.uint16)              # codeword i // 255, its position i % 255
    as_bits = np.unpackbits(number.astype(">u2").view(np.uint8))[None]
    sent = np.packbits(Interleave(rows=depth, columns=n // depth, unit=16).encode(as_bits)).view(">u2")
    got = [[int(sent[i]) // 255, int(sent[i]) % 255] for i in entry["params"]["indices"]]
    assert got == entry["expected"], entry["source"]


def test_order_lists_the_bit_sent_at_every_place():
    step = Interleave(order=(2, 0, 1))
    assert text(step.encode(bits("100" "011"))[0]) == "010" "101"
    doubt = np.array([[1, 2, 3, 4, 5, 6]], np.uint8)
    assert step.decode(Batch(bits("010101"), doubt)).doubt.tolist() == [[2, 3, 1, 5, 6, 4]]


@settings(derandomize=True, deadline=None, max_examples=30)
@given(st.integers(1, 6), st.integers(1, 6), st.integers(1, 5), st.integers(1, 3))
def test_exchanging_rows_and_columns_undoes_the_interleaver(rows, columns, unit, blocks):
    data = np.random.default_rng(6).integers(0, 2, (2, rows * columns * unit * blocks), np.uint8)
    word = Interleave(rows=rows, columns=columns, unit=unit).encode(data)
    assert_array_equal(Interleave(rows=columns, columns=rows, unit=unit).encode(word), data)
    symbols = data.reshape(2, blocks, rows, columns, unit).swapaxes(2, 3).reshape(2, -1)
    assert_array_equal(word, symbols)


@pytest.mark.parametrize(("keys", "key"), [
    ({}, "rows"), ({"rows": 3}, "rows"), ({"order": (0, 1), "rows": 2}, "order"), ({"order": (0, 2)}, "order"),
])
def test_impossible_interleavers_name_the_key(keys, key):
    with pytest.raises(ParameterError) as caught:
        Interleave(**keys)
    assert caught.value.key == key


@pytest.mark.parametrize(("keys", "sent"), [
    ({}, "804c"), ({"unit": 8, "within": 16}, "3201"), ({"unit": 4}, "1023"), ({"unit": 1, "within": 16}, "4c80"),
])
def test_bits_bytes_and_nibbles_change_places(keys, sent):
    assert_array_equal(BitOrder(**keys).encode(hex_bits("0132")), hex_bits(sent))


@pytest.mark.parametrize("step", [BitOrder(), Interleave(rows=3, columns=4), Interleave(order=(1, 0), unit=8)])
def test_a_length_that_no_word_has_is_short(step):
    with pytest.raises(LengthError):
        step.data_bits(13)
    assert step.decode(Batch(np.zeros((2, 13), np.uint8))).fault.tolist() == [SHORT, SHORT]


def test_a_unit_that_does_not_fit_names_the_key():
    with pytest.raises(ParameterError, match="within"):
        BitOrder(unit=3, within=8)


def test_rows_of_a_buffer_become_bits():
    buffer = np.arange(256, dtype=np.uint8)
    got = unpack_rows(buffer, np.array([3, 200, 0]), 5)
    assert_array_equal(got, np.unpackbits(np.stack([buffer[s : s + 5] for s in (3, 200, 0)]), axis=1))
    assert unpack_rows(buffer, np.zeros(0, np.int64), 5).shape == (0, 40)
    assert unpack_rows(buffer, np.array([7]), 0).shape == (1, 0)
