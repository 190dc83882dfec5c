"""Frames: both ways to decode give the same table, wrappers of every shape are taken apart."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pcaptool.capture.datagrams import Datagrams
from pcaptool.coding.chain import REASONS
from pcaptool.frames.decode import FrameDecoder
from pcaptool.frames.table import STATES
from pcaptool.profile import encode_fields, load_profile, parse_profile

HEAD = """
format = 1
name = "test"
title = "t"
basis = "invented for this test"
[carrier]
port = [5000]
"""


def profile(text: str):
    return parse_profile((HEAD + text).encode(), "test.toml")


def datagrams(payloads: list[bytes], held: list[int] | None = None, port: int = 5000) -> Datagrams:
    n = len(payloads)
    sizes = np.array([len(p) for p in payloads], np.int32)
    buffer = np.frombuffer(b"".join(payloads) or b"\0", np.uint8)
    ports = np.full(n, port, np.uint16)
    address = np.zeros((n, 2), np.uint64)
    return Datagrams(
        buffer, np.arange(n), np.ones(n, np.int32), np.arange(n) * 10**9, np.arange(n) * 10**9,
        (np.cumsum(sizes) - sizes).astype(np.int64), sizes if held is None else np.array(held, np.int32), sizes, ports,
        ports, address, address, np.full(n, 4, np.uint8), np.arange(1, n + 1, dtype=np.int32),
        np.zeros(n, np.uint16))


def decode(p, payloads, held=None, **options):
    d = datagrams(payloads, held)
    taken = np.zeros(len(d), np.bool_)
    frames, cut = FrameDecoder(p, **options).decode(d, taken)
    return frames, taken, cut


def equal(a, b):
    for name in a.__slots__:
        x, y = getattr(a, name), getattr(b, name)
        if isinstance(x, dict):
            assert x.keys() == y.keys()
            for key in x:
                np.testing.assert_array_equal(x[key], y[key], err_msg=key)
        elif isinstance(x, np.ndarray):
            np.testing.assert_array_equal(x, y, err_msg=name)
        else:
            assert x == y, name


@pytest.mark.parametrize("name", ["merrowdale", "ieee-802-15-4", "ieee-1815"])
def test_proven_and_decoded_frames_give_the_same_table(name, monkeypatch):
    """One bit wrong in some frames, many in others; with proofs from the first frame on, and without any."""
    p = load_profile(name)
    rng = np.random.default_rng(3)
    payloads = []
    for i in range(300):
        if name == "merrowdale":
            bits = encode_fields(p, {"unit": np.array([2]), "count": np.array([i % 256]),
                                     "depth": rng.integers(0, 60000, 1)}, "level")
            front = bytes.fromhex("4D5701") + i.to_bytes(2, "big") + b"\xb0\x0f"
        elif name == "ieee-1815":
            bits, front = rng.integers(0, 2, (1, 8 * int(rng.integers(5, 9))), np.uint8), b""
        else:
            bits, front = rng.integers(0, 2, (1, 8 * int(rng.integers(3, 6))), np.uint8), b""
        air = p.chain.encode(bits)
        if i % 3:
            begin = 16 if name == "ieee-1815" else 0
            air[0, rng.integers(begin, air.shape[1], int(rng.integers(1, 5)))] ^= 1
        payloads.append(front + np.packbits(air).tobytes())
    d = datagrams(payloads, port=p.carrier.port[0])
    if p.carrier.net:
        d.source[:, 1] = 0x0A3D000A
    monkeypatch.setattr("pcaptool.frames.decode.WORTH_A_PROOF", 1)
    proven, _ = FrameDecoder(p).decode(d, np.zeros(len(d), np.bool_))
    plain, _ = FrameDecoder(p, proofs=False).decode(d, np.zeros(len(d), np.bool_))
    assert (proven.state == STATES.index("intact")).sum() >= 100
    equal(proven, plain)


SEVERAL = """
[wrapper]
before = [ { name = "n", bytes = 1 } ]
each = [ { name = "tag", bytes = 1, signed = true }, { name = "size", bytes = 1 } ]
after = [ { name = "tail", bytes = 2, order = "little" } ]
frames = "n"
frame_bytes = "size"
frame_bytes_plus = -1
[message]
fields = [ { name = "v", bits = 8 } ]
[link]
by = ["wrapper.tag"]
"""


def test_several_frames_of_different_size_in_a_datagram():
    payloads = [bytes([2, 0xFF, 2, 0x41, 0x05, 3, 0x42, 0x99, 0x34, 0x12]), bytes([1, 0x07, 2, 0x55, 0, 0])]
    frames, taken, _ = decode(profile(SEVERAL), payloads)
    assert taken.all()
    assert frames.packet.tolist() == [0, 0, 1] and frames.slot.tolist() == [0, 1, 0]
    assert frames.fields["wrapper.tag"].tolist() == [-1, 5, 7]
    assert frames.fields["v"].tolist() == [0x41, 0x42, 0x55]
    assert frames.fields["wrapper.tail"].tolist() == [0x1234, 0x1234, 0]
    assert frames.air_bits.tolist() == [8, 16, 8]
    assert frames.records.tolist() == [1, 0, 1]


def test_a_size_beyond_the_datagram_makes_a_short_frame():
    frames, _, _ = decode(profile(SEVERAL), [bytes([1, 1, 9, 0x41, 0, 0])])
    assert [STATES[s] for s in frames.state] == ["short"]


FIXED = """
[wrapper]
before = [ { name = "mark", bytes = 2, must_be = 0xABCD }, { name = "g", bytes = 1 } ]
[[coding]]
step = "crc"
width = 8
poly = 0x07
[message]
order = "little"
fields = [
  { name = "low", bits = 4 }, { name = "sign", bits = 4, signed = true },
  { name = "word", bits = 16 }, { name = "net", bits = 16, order = "big" },
]
[link]
by = ["wrapper.g"]
[counter]
field = "low"
window = 4
"""


def test_a_fixed_value_that_differs_leaves_the_datagram_to_others():
    good, other = bytes.fromhex("ABCD01" + "F3341256782E"), bytes.fromhex("ABCE01" + "F3341256782E")
    _, taken, _ = decode(profile(FIXED), [good, other])
    assert taken.tolist() == [True, False]


def test_fields_in_either_bit_order_by_hand():
    """0xF3: low nibble 3, high nibble F is -1 signed; 34 12 little endian is 0x1234; 56 78 big endian."""
    body = bytes.fromhex("F334125678")
    p = profile(FIXED)
    air = np.packbits(p.chain.encode(np.unpackbits(np.frombuffer(body, np.uint8))[None])).tobytes()
    frames, _, _ = decode(p, [b"\xab\xcd\x01" + air])
    values = {name: int(frames.fields[name][0]) for name in ("low", "sign", "word", "net")}
    assert values == {"low": 3, "sign": -1, "word": 0x1234, "net": 0x5678}
    assert frames.counter.tolist() == [3]


def test_a_frame_cut_by_the_capture_is_short_and_one_cut_in_the_wrapper_is_told_apart():
    payload = bytes.fromhex("ABCD01" + "F3341256782E")
    frames, taken, cut = decode(profile(FIXED), [payload, payload], held=[5, 2])
    assert [STATES[s] for s in frames.state] == ["short"] and cut == 1 and taken.all()


KINDS = """
[message]
fields = [ { name = "type", bits = 8 } ]
[[message.kind]]
name = "one"
when = { type = 1 }
fields = [ { name = "a", bits = 8 }, { name = "same", bits = 8 } ]
[[message.kind]]
name = "two"
when = { type = 2 }
fields = [ { name = "same", bits = 16 }, { name = "fixed", bits = 8, must_be = 7 } ]
[link]
by = ["carrier.source"]
"""


def test_kinds_have_their_own_fields():
    frames, _, _ = decode(profile(KINDS), [b"\x01\x0a\x0b", b"\x02\x01\x00\x07", b"\x03\x00\x00"])
    assert frames.fields["a"][frames.present["a"]].tolist() == [10]
    assert frames.fields["same"][frames.present["same"]].tolist() == [11, 256]
    assert frames.present["same"].tolist() == [True, True, False]


def test_a_field_that_must_have_a_value_makes_a_frame_corrupted():
    frames, _, _ = decode(profile(KINDS), [b"\x02\x01\x00\x08"])
    assert STATES[frames.state[0]] == "corrupted" and REASONS[int(frames.reason[0])] == "bad_field"


@given(st.lists(st.binary(max_size=40), max_size=12), st.sampled_from([SEVERAL, FIXED, KINDS]))
def test_garbage_gives_rows_and_never_an_error(payloads, text):
    p = profile(text)
    frames, taken, cut = decode(p, payloads)
    assert len(frames) == len(frames.state) and (frames.state < len(STATES)).all()
    assert set(frames.packet.tolist()) <= set(np.flatnonzero(taken).tolist())
