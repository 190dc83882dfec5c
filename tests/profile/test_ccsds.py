"""CCSDS frames of every depth, code and header, against an independent encoder written after the standards."""

import numpy as np
import pytest
import reedsolo

from pcaptool.profile import decode_fields, load_profile, parse_profile


def field():
    """GF(256) by x^8 + x^7 + x^2 + x + 1: (powers, logarithms)."""
    powers, x = [], 1
    for _ in range(255):
        powers.append(x)
        x <<= 1
        x ^= 0x187 if x & 256 else 0
    return powers, {v: i for i, v in enumerate(powers)}


POWERS, LOG = field()


def times(a, b):
    return POWERS[(LOG[a] + LOG[b]) % 255] if a and b else 0


def trace(x):
    total = y = x
    for _ in range(7):
        y = times(y, y)
        total ^= y
    return total


# CCSDS 131.0-B, annex: bit i of the dual representation of u is the trace of u alpha^(117 i)
DUAL = [int("".join(str(trace(times(u, POWERS[117 * i % 255]))) for i in range(8)), 2) for u in range(256)]
BACK = [DUAL.index(i) for i in range(256)]


def coded(frame: bytes, depth: int, checks: int) -> bytes:
    """Reed-Solomon codewords in the dual basis, interleaved symbol by symbol: CCSDS 131.0-B, clause 4."""
    code = reedsolo.RSCodec(checks, fcr=128 - checks // 2, prim=0x187, generator=POWERS[11])
    words = [bytes(DUAL[s] for s in code.encode(bytes(BACK[s] for s in frame[i::depth]))) for i in range(depth)]
    return bytes(words[j % depth][j // depth] for j in range(255 * depth))


def randomized(data: bytes) -> bytes:
    """x^8 + x^7 + x^5 + x^3 + 1 from all ones, begun with every block."""
    s = [1] * 8
    while len(s) < 8 * len(data):
        s.append(s[-1] ^ s[-3] ^ s[-5] ^ s[-8])
    mask = np.packbits(np.array(s[: 8 * len(data)], np.uint8))
    return bytes(a ^ int(b) for a, b in zip(data, mask, strict=True))


def frame(header: bytes, size: int, rng) -> bytes:
    """A transfer frame with its error control field: CRC x^16 + x^12 + x^5 + 1 from all ones, by division."""
    data = header + rng.bytes(size - 2 - len(header))
    register = 0xFFFF
    for octet in data:
        register ^= octet << 8
        for _ in range(8):
            register = (register << 1 ^ (0x1021 if register & 0x8000 else 0)) & 0xFFFF
    return data + register.to_bytes(2, "big")


def convolved(bits):
    """Rate 1/2, K = 7, 171 and 133 octal, the second output inverted: CCSDS 131.0-B, clause 3; begun with zeros."""
    history, out = [0] * 7, []
    for bit in bits:
        history = [int(bit), *history[:-1]]
        out.append(sum(history[i] for i in (0, 1, 2, 3, 6)) & 1)
        out.append(sum(history[i] for i in (0, 2, 3, 5, 6)) & 1 ^ 1)
    return np.array(out, np.uint8)


HEADERS = {     # virtual channel frame count 17
    "ccsds-tm": (bytes([0x15, 0x56, 0x42, 17, 0x1F, 0xFF]), {"spacecraft": 0x155, "channel": 3, "channel_count": 17}),
    "ccsds-aos": (bytes([0x55, 0x49, 0, 0, 17, 0]), {"spacecraft": 0x55, "channel": 9, "channel_count": 17}),
}


def profile_of(name, depth, checks, inner):
    text = load_profile(name).text
    text = text[: text.index("[[example]]")].replace("depth      = 5", f"depth      = {depth}")
    if checks == 16:
        text = text.replace("k          = 223", "k          = 239").replace("first_root = 112", "first_root = 120")
    if inner:
        other = load_profile("ccsds-tm-convolutional").text
        step = other[other.index('[[coding]]\nstep              = "convolutional"') :]
        text = text.replace("[message]", step[: step.index("\n\n")].replace('"stream"', '"none"') + "\n\n[message]")
    return parse_profile(text.encode(), "t.toml")


@pytest.mark.parametrize("inner", [False, True], ids=["", "convolutional"])
@pytest.mark.parametrize("checks", [32, 16])
@pytest.mark.parametrize("depth", [1, 2, 3, 4, 5, 8])
@pytest.mark.parametrize("name", HEADERS)
def test_frames_of_every_depth_and_code(name, depth, checks, inner):
    profile = profile_of(name, depth, checks, inner)
    rng = np.random.default_rng(depth)
    header, fields = HEADERS[name]
    sent = frame(header, (255 - checks) * depth, rng)
    air = bytes.fromhex("1ACFFC1D") + randomized(coded(sent, depth, checks))
    bits = np.unpackbits(np.frombuffer(air, np.uint8))
    if inner:
        bits = convolved(bits)
    came = bits[None].copy()
    wrong = rng.choice(np.arange(40 * (1 + inner), len(bits), 60), 8, replace=False)
    came[0, wrong] ^= 1
    out = profile.chain.decode(np.concatenate([bits[None], came]))
    assert out.reason.tolist() == [0, 0] and out.wrong_bits.tolist() == [0, 8]
    assert sorted(wrong.tolist()) == out.error_position[out.error_frame == 1].tolist()
    assert np.packbits(out.message[1]).tobytes() == sent[:-2]
    values = decode_fields(profile, out.message[:1])
    assert {n: int(values[n][0]) for n in fields} == fields
