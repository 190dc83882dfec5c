"""Air frames that hold several frames, and air frames of soft decisions."""

import numpy as np
import pytest
from numpy.testing import assert_array_equal
from scapy.layers.inet import IP, UDP
from scapy.layers.l2 import Ether
from scapy.packet import Raw
from scapy.utils import wrpcap

import pcaptool
from pcaptool.frames.cut import Cutter, air_bits
from pcaptool.profile import load_profile, parse_profile


def capture(path, payloads, port):
    packets = []
    for i, payload in enumerate(payloads):
        packet = Ether() / IP(src="192.0.2.10", dst="192.0.2.1", id=i + 1) / UDP(sport=port, dport=port) / Raw(payload)
        packet.time = 1_800_000_000 + i
        packets.append(packet)
    wrpcap(str(path), packets)
    return path


def report(station):
    """A message of 168 bits of a station, as sent before FCS: type 1, station, the rest a pattern."""
    text = f"{1:06b}{0:02b}{station:030b}" + "0110" * 33
    return bytes(int(text[i : i + 8], 2) for i in range(0, 168, 8))[:21]


def on_the_air(messages, level=0):
    """Flags, stuffing, FCS and NRZI by hand: the X.25 check bit by bit, least significant bit first."""
    flag, line = "01111110", "01" * 12 + "01111110"
    for message in messages:
        register = 0xFFFF
        for octet in message:
            register ^= octet
            for _ in range(8):
                register = register >> 1 ^ (0x8408 if register & 1 else 0)
        check = register ^ 0xFFFF
        ones = 0
        for octet in (*message, check & 255, check >> 8):
            for j in range(8):
                bit = octet >> j & 1
                line += str(bit)
                ones = ones + 1 if bit else 0
                if ones == 5:
                    line, ones = line + "0", 0
        line += flag
    line += flag * 2
    line = line[: len(line) // 8 * 8]
    out = ""
    for bit in line:
        level ^= bit == "0"
        out += str(int(level))
    return bytes(int(out[i : i + 8], 2) for i in range(0, len(out), 8))


def test_several_messages_in_an_air_frame_are_frames_of_their_own(tmp_path):
    stations = [[477553000], [111111111, 222222222], [], [123456789, 5, 477553000]]
    payloads = [on_the_air([report(s) for s in group]) for group in stations]
    hurt = bytearray(payloads[1])
    hurt[30] ^= 0x10                                # in the second message: 24 bits of training, flag, 184 bits
    payloads.append(bytes(hurt))
    audit = pcaptool.audit(capture(tmp_path / "a.pcap", payloads, 48177), profile="itu-r-m1371")
    frames, ledger = audit.frames, audit.summary["ledger"]
    audit.close()
    usable = frames[frames["state"] == "intact"]
    assert usable["station"].tolist() == [477553000, 111111111, 222222222, 123456789, 5, 477553000, 111111111]
    assert frames["packet"].tolist() == [0, 1, 1, 2, 3, 3, 3, 4, 4][: len(frames)]
    assert frames["slot"].tolist() == [0, 0, 1, 0, 0, 1, 2, 0, 1][: len(frames)]
    assert frames["state"].tolist()[3] == "short"   # flags, and no frame between them
    assert ledger["frames"] == 5


def test_channel_errors_are_counted_on_the_air_outside_the_line_code():
    """A frame that a code repairs inside Manchester: every wrong half bit is found where it came."""
    text = """format = 1
name = "t"
title = "t"
basis = "invented"
[carrier]
port = [5000]
[wrapper]
carries = "frames"
[[coding]]
step = "crc"
standard = "ccsds"
[[coding]]
step = "golay"
[[coding]]
step = "sync"
word = "2DD4"
every = 88
flywheel = 1
[[coding]]
step = "line_code"
kind = "manchester"
[message]
fields = [ { name = "unit", bits = 8 }, { name = "_rest", bits = 12 } ]
[link]
by = ["unit"]
"""
    profile = parse_profile(text.encode(), "t.toml")
    cutter = Cutter(profile.chain)
    assert cutter.ratio() == 2
    rng = np.random.default_rng(1)
    messages = rng.integers(0, 2, (3, 20), np.uint8)
    air = profile.chain.encode(messages).reshape(1, -1)
    air = np.concatenate([rng.integers(0, 2, (1, 14), np.uint8), air], axis=1)
    wrong = [14 + 50, 14 + 176 + 3, 14 + 176 + 100, 14 + 352 + 175]
    air[0, wrong] ^= 1
    cut = cutter.cut(air, None, {})
    assert cut.begin.tolist() == [14, 190, 366] and cut.size.tolist() == [176, 176, 176]
    assert_array_equal(cut.outcome.message[:, :20], messages)
    assert cut.outcome.wrong_bits.tolist() == [1, 2, 1]
    assert (cut.begin[cut.outcome.error_frame] + cut.outcome.error_position).tolist() == wrong


@pytest.mark.parametrize(("soft", "one", "octets", "bits", "sure"), [
    ("signed-8", "negative", "7F 81 00 05 FB 80", "010011", [1, 1, 0, 5 / 127, 5 / 127, 1]),
    ("signed-4", "negative", "79 0F", "0101", [1, 1, 0, 1 / 7]),
    ("signed-4", "positive", "79 0F", "1000", [1, 1, 0, 1 / 7]),
])
def test_soft_bits_by_hand(soft, one, octets, bits, sure):
    buffer = np.frombuffer(bytes.fromhex(octets), np.uint8)
    got, doubt = air_bits(buffer, np.array([0]), len(buffer), soft, one)
    assert "".join(map(str, got[0])) == bits
    assert_array_equal(doubt[0], 255 - np.rint(255 * np.array(sure)))


def test_soft_decisions_reach_the_decoder(tmp_path):
    """K = 7 in noise: what hard decisions lose, soft ones keep (about 2 dB, any textbook)."""
    chain = '[[coding]]\nstep = "convolutional"\nconstraint_length = 7\ngenerators = ["171", "133"]\n'
    text = """format = 1
name = "t"
title = "t"
basis = "invented"
[carrier]
port = [5000]
[wrapper]
SOFT
[[coding]]
step = "crc"
standard = "ccsds"
""" + chain + """[[coding]]
step = "pad"
bits = 4
[message]
fields = [ { name = "unit", bits = 8 }, { name = "count", bits = 16 }, { name = "_rest", bits = 64 } ]
[link]
by = ["unit"]
[counter]
field = "count"
"""
    rng = np.random.default_rng(3)
    soft = parse_profile(text.replace("SOFT", 'soft_bits = "signed-8"').encode(), "t.toml")
    hard = parse_profile(text.replace("SOFT", "").encode(), "t.toml")
    messages = rng.integers(0, 2, (300, 200), np.uint8)
    messages[:, :24] = np.unpackbits(np.stack([np.full(300, 7), np.arange(300) >> 8, np.arange(300) & 255], 1)
                                     .astype(np.uint8), axis=1)
    air = soft.chain.encode(messages)
    level = (1 - 2.0 * air) + rng.normal(0, 0.7, air.shape)
    values = np.clip(np.rint(level * 48), -127, 127).astype(np.int8)
    good = {}
    for profile, payloads in ((soft, [v.tobytes() for v in values]),
                              (hard, [np.packbits(v < 0).tobytes() for v in values])):
        audit = pcaptool.audit(capture(tmp_path / "a.pcap", payloads, 5000), profile=profile)
        frames = audit.frames
        audit.close()
        assert (frames["air_bits"] == air.shape[1]).all()
        good[profile is soft] = int((frames["state"] == "corrected").sum())
        if profile is soft:
            row = frames["counter"].astype("Int64").dropna().astype(int).to_numpy()
            usable = frames[frames["counter"].notna()]
            assert_array_equal(usable["wrong_bits"].to_numpy(int), ((values < 0) != air).sum(axis=1)[row])
    assert good[True] > 280 > 200 > good[False], good


def test_profiles_that_cut_name_a_step_that_can():
    from pcaptool.problem import ProfileError

    text = load_profile("merrowdale").text.replace("[wrapper]", '[wrapper]\ncarries = "frames"', 1)
    with pytest.raises(ProfileError, match="no step that finds frames"):
        parse_profile(text.encode(), "t.toml")
