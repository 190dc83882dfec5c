"""What every coding step promises, checked for all of them."""

import dataclasses
import pkgutil
from importlib import import_module
from typing import Annotated, get_args, get_origin, get_type_hints

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal
from pydantic import TypeAdapter, ValidationError
from typing_extensions import Doc

import pcaptool.coding
from pcaptool.coding import STEPS
from pcaptool.coding.step import OK, SHORT, Batch, LengthError, Step

# step, keys, data bits, values of the wrapper fields that it needs
EXAMPLES = [
    ("crc", {"standard": "itu-t-v41"}, 56, {}),
    ("crc", {"standard": "iso-11898-crc15"}, 19, {}),
    ("crc", {"standard": "ieee-1815", "every": 16, "first": 8}, 43 * 8, {}),
    ("crc", {"width": 24, "poly": 0x864CFB, "at": "start", "skip": 3, "cover": 11, "order": "little"}, 20, {}),
    ("checksum", {"kind": "internet"}, 72, {}),
    ("checksum", {"kind": "fletcher16", "order": "little"}, 40, {}),
    ("checksum", {"kind": "iso-fletcher"}, 40, {}),
    ("checksum", {"kind": "xor8", "at": "start"}, 40, {}),
    ("checksum", {"kind": "odd-parity", "every_bits": 7}, 20, {}),
    ("hamming", {"n": 12, "k": 8}, 24, {}),
    ("hamming", {"n": 39, "k": 32, "extended": True, "layout": "systematic"}, 64, {}),
    ("block_code", {"generator": ["1101000", "0110100", "0011010", "0001101"]}, 12, {}),
    ("block_code", {"parity": [0b1101100, 0b1011010, 0b0111001], "n": 7}, 8, {}),
    ("golay", {"n": 23}, 24, {}),
    ("golay", {"generator": "AE3"}, 12, {}),
    ("bch", {"n": 31, "k": 21}, 42, {}),
    ("bch", {"n": 64, "m": 7, "t": 5, "extended": True}, 28, {}),
    ("bch", {"n": 63, "k": 56, "generator": 0xC5, "complement": True, "filler": 1}, 112, {}),
    ("reed_solomon", {"n": 255, "k": 239, "poly": 0x187, "first_root": 120, "root_step": 11, "basis": "dual",
                      "depth": 2, "fill": 200}, 39 * 16, {}),
    ("reed_solomon", {"n": 15, "k": 9, "m": 4, "shorten": True}, 20, {}),
    ("convolutional", {"constraint_length": 7, "generators": ["171", 0o133], "inverted": [0, 1]}, 40, {}),
    ("convolutional", {"constraint_length": 3, "generators": ["7", "5"], "tail": "biting"}, 9, {}),
    ("convolutional", {"constraint_length": 4, "generators": ["17", "13"], "feedback": "17", "tail": "none"}, 31, {}),
    ("convolutional", {"constraint_length": 5, "generators": ["35", "23"], "puncture": ["101", "110"],
                       "tail": "stream"}, 25, {}),
    ("repeat", {"times": 3}, 10, {}),
    ("repeat", {"times": 4, "order": "word"}, 10, {}),
    ("interleave", {"rows": 3, "columns": 5}, 30, {}),
    ("interleave", {"rows": 2, "columns": 3, "unit": 8}, 48, {}),
    ("interleave", {"order": [3, 1, 0, 2]}, 12, {}),
    ("interleave", {"branches": 3, "delay": 2, "unit": 4}, 28, {}),
    ("scramble", {"poly": "x^17 + x^12 + 1", "seed": 0x1ABCD}, 40, {}),
    ("line_code", {"kind": "manchester"}, 13, {}),
    ("line_code", {"kind": "manchester", "one": "10"}, 13, {}),
    ("line_code", {"kind": "differential_manchester", "toggle_on": 1, "level": 1}, 13, {}),
    ("line_code", {"kind": "nrzi", "level": 1}, 13, {}),
    ("line_code", {"kind": "differential"}, 13, {}),
    ("line_code", {"kind": "three_of_six"}, 20, {}),
    ("bit_stuffing", {}, 40, {}),
    ("bit_stuffing", {"run": 3, "opening": 2, "least": 4}, 22, {}),
    ("whiten", {"poly": "x^9 + x^5 + 1", "seed": 0x1FF, "skip": 8}, 40, {}),
    ("whiten", {"poly": "x^7 + x^4 + 1", "form": "galois", "seed": 64, "seed_from": "wrapper.channel",
                "pack": "lsb"}, 21, {"channel": [37, 12, 37, 0, 39]}),
    ("whiten", {"sequence": "A5 0F 3C"}, 41, {}),
    ("bit_order", {}, 32, {}),
    ("bit_order", {"unit": 8, "within": 16}, 32, {}),
    ("sync", {"word": "1ACFFC1D", "tolerate": 3, "within": 4}, 17, {}),
    ("length", {"bits": 10, "unit": 1, "plus": 3}, 21, {}),
    ("length", {"bits": 16, "order": "little"}, 24, {}),
    ("pad", {"bits": 5, "value": 0b10110}, 11, {}),
    ("pad", {"bits": 5, "at": "start", "ignored": True}, 11, {}),
    ("pad", {"to": 8}, 16, {}),
    ("pad", {"to": 8, "unit": 12, "pattern": "0b01"}, 36, {}),
]
FRAMES = 5


def build(name, keys) -> Step:
    """Build a step as a profile does: strictly, arrays as lists, like TOML."""
    return TypeAdapter(STEPS[name]).validate_json(TypeAdapter(dict).dump_json(keys), strict=True)


def example(name, keys, k, context):
    data = np.random.default_rng(k).integers(0, 2, (FRAMES, k), np.uint8)
    return build(name, keys), data, {field: np.array(v, np.int64) for field, v in context.items()}


all_steps = pytest.mark.parametrize(("step", "data", "context"), [
    pytest.param(*example(*e), id=f"{e[0]}-{i}") for i, e in enumerate(EXAMPLES)])


def at(context, rows):
    return {field: values[rows] for field, values in context.items()}


def test_every_step_file_is_registered_and_has_an_example():
    found = {}
    for module in pkgutil.iter_modules(pcaptool.coding.__path__):
        for value in vars(import_module(f"pcaptool.coding.{module.name}")).values():
            if isinstance(value, type) and issubclass(value, Step) and "name" in vars(value):
                found[value.name] = value
    assert found == STEPS
    assert {e[0] for e in EXAMPLES} == set(STEPS)


@pytest.mark.parametrize("name", STEPS)
def test_every_key_is_documented_and_has_a_schema(name):
    hints = get_type_hints(STEPS[name], include_extras=True)
    for key in dataclasses.fields(STEPS[name]):
        assert get_origin(hints[key.name]) is Annotated, key.name
        assert any(isinstance(note, Doc) for note in get_args(hints[key.name])), key.name
    schema = TypeAdapter(STEPS[name]).json_schema()
    assert set(schema["properties"]) == {key.name for key in dataclasses.fields(STEPS[name])}
    assert (STEPS[name].__doc__ or "").strip()


@pytest.mark.parametrize("entry", EXAMPLES, ids=lambda e: e[0])
def test_parameters_survive_a_profile(entry):
    step = build(entry[0], entry[1])
    adapter = TypeAdapter(type(step))
    assert adapter.validate_json(adapter.dump_json(step), strict=True) == step
    with pytest.raises(dataclasses.FrozenInstanceError):
        setattr(step, dataclasses.fields(step)[0].name, 1)


@pytest.mark.parametrize("keys", [{"bits": "5"}, {"bits": 5.0}, {"bits": -1}, {"bits": True}])
def test_wrong_types_are_refused(keys):
    with pytest.raises(ValidationError):
        build("pad", keys)


@all_steps
def test_decode_undoes_encode(step, data, context):
    word = step.encode(data, context)
    assert word.dtype == np.uint8 and word.max() <= 1
    assert word.shape == (FRAMES, step.coded_bits(data.shape[1]))
    assert step.data_bits(word.shape[1]) == data.shape[1]
    decoded = step.decode(Batch(word), context)
    assert decoded.fault.dtype == np.uint8 and decoded.fault.tolist() == [OK] * FRAMES
    assert decoded.repaired.dtype == np.int32 and not decoded.repaired.any()
    assert decoded.headroom is None or (decoded.headroom.dtype == np.float32 and (decoded.headroom == 1).all())
    if step.name == "bit_stuffing":     # every word says where it ends, and what the line does behind
        assert (decoded.length == data.shape[1]).all()
        assert_array_equal(decoded.bits[:, : data.shape[1]], data)
        for row in range(FRAMES):
            side = decoded.side[row : row + 1, : decoded.side_length[row]]
            assert_array_equal(step.encode(data[row : row + 1], context, side)[0], word[row])
        return
    assert decoded.length is None
    assert_array_equal(decoded.bits, data)
    assert_array_equal(step.encode(decoded.bits, context, decoded.side), word)


@all_steps
def test_strip_undoes_encode_and_both_are_affine(step, data, context):
    if not step.linear:
        return
    one = at(context, np.zeros(FRAMES, np.int64))           # affine for one context
    word = step.encode(data, one)
    assert_array_equal(step.strip(word, one)[0], data)
    a, b, c = data[:1], data[1:2], data[2:3]
    first = at(one, slice(1))
    assert_array_equal(step.encode(a ^ b ^ c, first), word[:1] ^ word[1:2] ^ word[2:3])
    noise = np.random.default_rng(8).integers(0, 2, word.shape, np.uint8)
    stripped = step.strip(noise, one)[0]
    assert_array_equal(step.strip(noise[:1] ^ noise[1:2] ^ noise[2:3], first)[0],
                       stripped[:1] ^ stripped[1:2] ^ stripped[2:3])


@all_steps
def test_a_linear_step_proves_only_words_that_it_encodes(step, data, context):
    """encode(strip(w)) == w holds for code words and for no word that decode would change or reject."""
    if not step.linear:
        return
    word = step.encode(data, context)
    for j in range(word.shape[1]):
        bad = word.copy()
        bad[:, j] ^= 1
        stripped, side = step.strip(bad, context)
        proven = (step.encode(stripped, context, side) == bad).all(axis=1)
        decoded = step.decode(Batch(bad), context)
        accepted = (decoded.fault == OK) & (decoded.repaired == 0)
        if step.role == "check":
            assert (proven <= accepted).all() and (accepted <= proven).all()
        if step.role == "code":
            assert not proven.any() and not accepted.any()


@all_steps
def test_inputs_are_left_alone(step, data, context):
    kept, word = data.copy(), step.encode(data, context)
    bad = word.copy()
    bad[:, ::9] ^= 1
    doubt = np.where(np.arange(bad.shape[1]) % 5, 0, 255).astype(np.uint8)[None].repeat(FRAMES, axis=0)
    before, sure = bad.copy(), doubt.copy()
    decoded = step.decode(Batch(bad, doubt), context)
    assert decoded.doubt is None or decoded.doubt.shape == decoded.bits.shape
    if step.linear:
        step.strip(bad, context)
    assert_array_equal(data, kept)
    assert_array_equal(bad, before)
    assert_array_equal(doubt, sure)


@all_steps
def test_an_empty_batch_gives_an_empty_batch(step, data, context):
    none = at(context, slice(0))
    word = step.encode(data[:0], none)
    assert word.shape == (0, step.coded_bits(data.shape[1]))
    decoded = step.decode(Batch(word), none)
    assert decoded.bits.shape[1] >= data.shape[1]
    assert len(decoded.bits) == len(decoded.fault) == len(decoded.repaired) == 0
    if step.linear:
        assert step.strip(word, none)[0].shape == (0, data.shape[1])


@all_steps
def test_any_split_gives_the_same_rows(step, data, context):
    word = step.encode(data, context)
    word[:, 2::7] ^= np.random.default_rng(9).integers(0, 2, word[:, 2::7].shape, np.uint8)
    whole = step.decode(Batch(word), context)
    for cut in range(FRAMES + 1):
        for part in (slice(cut), slice(cut, None)):
            some = step.decode(Batch(word[part]), at(context, part))
            assert_array_equal(step.encode(data[part], at(context, part)), step.encode(data, context)[part])
            for field in ("fault", "repaired", "headroom"):
                if getattr(whole, field) is not None:
                    assert_array_equal(getattr(some, field), getattr(whole, field)[part])
            for row, i in enumerate(range(FRAMES)[part]):
                lengths = [d.bits.shape[1] if d.length is None else d.length[r] for d, r in ((some, row), (whole, i))]
                assert lengths[0] == lengths[1]
                assert_array_equal(some.bits[row, : lengths[0]], whole.bits[i, : lengths[0]])


@all_steps
@settings(derandomize=True, deadline=None, max_examples=30)
@given(width=st.integers(0, 90) | st.sampled_from([248, 255, 512, 816, 2040]), seed=st.integers(0, 1000))
def test_garbage_of_any_length_gives_rows_and_never_an_error(step, data, context, width, seed):
    """Random bits, all zero, all one, short and long."""
    noise = np.random.default_rng(seed).integers(0, 2, (FRAMES, width), np.uint8)
    noise[0], noise[1] = 0, 1
    decoded = step.decode(Batch(noise), context)
    assert len(decoded.bits) == len(decoded.fault) == len(decoded.repaired) == FRAMES
    try:
        k = step.data_bits(width)
    except LengthError:
        assert (decoded.fault == SHORT).all() or step.name == "length"      # data may be shorter than the word
        return
    assert step.coded_bits(k) == width or (step.name == "bit_stuffing" and k >= step.least)
    if decoded.length is None and not (decoded.fault == SHORT).any():
        assert decoded.bits.shape[1] == k
        word = step.encode(decoded.bits, context, decoded.side)
        assert word.shape == noise.shape
    if step.linear:
        assert step.strip(noise, context)[0].shape == (FRAMES, k)
