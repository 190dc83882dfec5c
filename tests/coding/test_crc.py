"""CRC: published values of open standards, other programs on random input, and the step's geometry."""

import binascii
import zlib

import crcmod
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal
from published import bits, crc_code, entries, hex_bits

from pcaptool.coding.crc import STANDARDS, Crc, CrcCode, crc, crc_bit_by_bit, crc_of_bits
from pcaptool.coding.step import CHECK_FAILED, OK, SHORT, Batch, LengthError, ParameterError


def crc_bytes(data: bytes, code: CrcCode) -> int:
    return int(crc(np.frombuffer(data, np.uint8)[None], np.array([len(data)]), code)[0])


@pytest.mark.parametrize("entry", entries("crc"))
def test_crc_equals_the_published_value(entry):
    code, value = crc_code(entry["params"]), int(entry["expected"], 16)
    if "input_bits" in entry["params"]:
        assert crc_of_bits(bits(entry["params"]["input_bits"]), code) == [value], entry["source"]
        return
    data = bytes.fromhex(entry["input_hex"])
    assert crc_bytes(data, code) == value, entry["source"]
    assert crc_bit_by_bit(data, code) == value, entry["source"]
    assert crc_of_bits(hex_bits(entry["input_hex"]), code) == [value], entry["source"]


def test_the_standards_are_those_published():
    published = {crc_code(p.values[0]["params"]) for p in entries("crc")}
    named = {code._replace(source="") for code in STANDARDS.values()}
    assert named <= published
    assert all(code.source for code in STANDARDS.values())
    check = {crc_code(p.values[0]["params"]) for p in entries("crc")
             if p.values[0]["input_hex"] == "313233343536373839"}
    assert check <= named


@pytest.mark.parametrize("entry", entries("crc_residue"))
def test_a_good_frame_leaves_the_published_residue(entry):
    code = crc_code(entry["params"])._replace(xorout=0)
    assert crc_bytes(bytes.fromhex(entry["input_hex"]), code) == int(entry["expected"], 16), entry["source"]


def step_of(params: dict, **keys) -> Crc:
    code = crc_code(params["crc"])
    return Crc(width=code.width, poly=code.poly, init=code.init, refin=code.refin, refout=code.refout,
               xorout=code.xorout, order=params["fcs_order"], **keys)


@pytest.mark.parametrize("entry", entries("frame_fcs"))
def test_the_step_sends_the_published_frame(entry):
    expected = hex_bits(entry["input_hex"] + entry["expected"])
    assert_array_equal(step_of(entry["params"]).encode(hex_bits(entry["input_hex"])), expected)


@pytest.mark.parametrize("entry", entries("frame_valid"))
def test_the_step_judges_the_published_frame(entry):
    first, every = entry["params"]["blocks"]
    decoded = step_of(entry["params"], first=first, every=every).decode(Batch(hex_bits(entry["input_hex"])))
    assert decoded.fault == [OK if entry["expected"] else CHECK_FAILED], entry["source"]


@pytest.mark.parametrize("standard", ["ieee-1815", "modbus", "ieee-802-15-4", "iso-13239-16", "iso-13239-32"])
def test_the_default_octet_order_is_that_of_the_standard(standard):
    code = STANDARDS[standard]
    frames = [p.values[0] for p in entries("frame_fcs")
              if crc_code(p.values[0]["params"]["crc"]) == code._replace(source="")]
    assert frames
    for frame in frames:
        sent = Crc(standard=standard).encode(hex_bits(frame["input_hex"]))
        assert_array_equal(sent, hex_bits(frame["input_hex"] + frame["expected"]))


RANDOM = np.random.default_rng(41).integers(0, 256, (40, 67), dtype=np.uint8)
N_BYTES = np.arange(40, dtype=np.int64) + 20


def test_crc_equals_zlib_and_binascii_on_random_frames():
    got = crc(RANDOM, N_BYTES, STANDARDS["ieee-802-3"])
    assert got.tolist() == [zlib.crc32(row[:n]) for row, n in zip(RANDOM, N_BYTES, strict=True)]
    got = crc(RANDOM, N_BYTES, STANDARDS["3gpp-crc16"])
    other = [binascii.crc_hqx(row[:n].tobytes(), 0) for row, n in zip(RANDOM, N_BYTES, strict=True)]
    assert got.tolist() == other


@pytest.mark.parametrize("name", [n for n, c in STANDARDS.items() if c.width in (8, 16, 24, 32, 64)])
def test_crc_equals_crcmod_on_random_frames(name):
    code = STANDARDS[name]
    init = int(format(code.init, f"0{code.width}b")[::-1], 2) if code.refin else code.init
    other = crcmod.mkCrcFun(code.poly | 1 << code.width, initCrc=init ^ code.xorout, rev=code.refin,
                            xorOut=code.xorout)
    got = crc(RANDOM, N_BYTES, code)
    assert got.tolist() == [other(row[:n].tobytes()) for row, n in zip(RANDOM, N_BYTES, strict=True)]


@settings(derandomize=True, deadline=None, max_examples=80)
@given(st.integers(1, 64), st.data())
def test_the_kernel_equals_the_plain_shift_register(width, draw):
    number = st.integers(0, 2**width - 1)
    code = CrcCode(width, draw.draw(number) | 1, draw.draw(number), draw.draw(st.booleans()),
                   draw.draw(st.booleans()), draw.draw(number))
    data = draw.draw(st.binary(min_size=0, max_size=40))
    assert crc_bytes(data, code) == crc_bit_by_bit(data, code)


@settings(derandomize=True, deadline=None, max_examples=40)
@given(st.integers(1, 64), st.integers(0, 7), st.data())
def test_bits_behind_the_last_octet_enter_as_the_register_says(width, rest, draw):
    """A message of zero bits and then octets has the CRC of the octets alone when init is 0."""
    code = CrcCode(width, draw.draw(st.integers(0, 2**width - 1)) | 1)
    data = draw.draw(st.binary(min_size=1, max_size=20))
    padded = np.concatenate([np.zeros((1, rest), np.uint8), hex_bits(data.hex())], axis=1)
    assert crc_of_bits(padded, code) == [crc_bit_by_bit(data, code)]


def test_a_reflected_code_takes_whole_octets_only():
    with pytest.raises(LengthError):
        Crc(standard="modbus").encode(np.zeros((1, 9), np.uint8))
    assert Crc(standard="modbus").decode(Batch(np.zeros((2, 9 + 16), np.uint8))).fault.tolist() == [SHORT] * 2


def test_skip_and_cover_choose_what_is_checked():
    step = Crc(standard="ccsds", skip=8, cover=16)
    word = step.encode(hex_bits("00abcdef01"))
    assert_array_equal(word[:, -16:], Crc(standard="ccsds").encode(hex_bits("abcd"))[:, -16:])
    outside, inside = word.copy(), word.copy()
    outside[0, [0, 39]] ^= 1
    inside[0, 8] ^= 1
    assert step.decode(Batch(np.concatenate([word, outside, inside]))).fault.tolist() == [OK, OK, CHECK_FAILED]


def test_a_check_in_front_is_read_in_front():
    word = Crc(standard="ccsds", at="start").encode(hex_bits("abcdef01"))
    assert_array_equal(word, hex_bits("04a2abcdef01"))      # ECSS-E-70-41A, annex A.1.5


def test_blocks_that_cannot_be_are_short():
    step = Crc(standard="ieee-1815", first=8, every=16)
    assert step.coded_bits(8 * 8) == 10 * 8 and step.coded_bits(8 * 25) == (10 + 18 + 3) * 8
    with pytest.raises(LengthError):
        step.data_bits(12 * 8)                              # a last block with nothing but its CRC
    assert step.decode(Batch(np.zeros((1, 12 * 8), np.uint8))).fault == [SHORT]


@pytest.mark.parametrize(("keys", "key"), [
    ({}, "width"),
    ({"standard": "itu-t-v42"}, "standard"),
    ({"standard": "ccsds", "width": 16}, "standard"),
    ({"width": 16, "poly": 0x11021}, "poly"),
    ({"width": 16}, "poly"),
    ({"width": 8, "poly": 7, "init": 256}, "init"),
    ({"standard": "ccsds", "first": 8}, "first"),
    ({"standard": "ccsds", "every": 8, "skip": 8}, "every"),
])
def test_impossible_parameters_name_the_key(keys, key):
    with pytest.raises(ParameterError) as caught:
        Crc(**keys)
    assert caught.value.key == key and caught.value.fix
