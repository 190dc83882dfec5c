"""Frames that span datagrams: a satellite's bit stream inside a convolutional code, cut anywhere."""

import struct

import numpy as np
import pytest
from scapy.layers.inet import IP, UDP
from scapy.layers.l2 import Ether
from scapy.packet import Raw
from scapy.utils import wrpcap

import pcaptool
from pcaptool.profile import load_profile

PROFILE = "ccsds-tm-convolutional"
FRAMES, FRAME_BITS = 14, 2 * (32 + 255 * 8)


@pytest.fixture(scope="module")
def sent():
    """The air bits of FRAMES frames in a row, some bits of another transmission in front, one bit out of step."""
    profile = load_profile(PROFILE)
    rng = np.random.default_rng(6)
    messages = rng.integers(0, 2, (FRAMES, 221 * 8), np.uint8)
    head = "00" + f"{0x155:010b}" + "011" + "0"
    for i, message in enumerate(messages):
        message[:48] = [int(c) for c in head + f"{i:08b}" + f"{(250 + i) % 256:08b}" + f"{0x1FFF:016b}"]
    marked = messages
    for step in profile.chain.steps[:-1]:
        marked = step.encode(marked)
    inner = profile.chain.steps[-1]
    before, behind = rng.integers(0, 2, (1, 301), np.uint8), rng.integers(0, 2, (1, 50), np.uint8)
    line = inner.encode(np.concatenate([before, marked.reshape(1, -1), behind], axis=1))[0]
    return np.concatenate([[1], line]).astype(np.uint8), 1 + 602


def packets(bits, rng, lose=(), source="192.0.2.10", first=0):
    """The stream in datagrams of 100 to 400 octets with a counter, without those to lose."""
    octets = np.packbits(bits[: len(bits) // 8 * 8]).tobytes()
    out, at, number = [], 0, 0
    while at < len(octets):
        size = int(rng.integers(100, 400))
        if number not in lose:
            payload = struct.pack(">I", first + number) + octets[at : at + size]
            ip = IP(src=source, dst="192.0.2.1", id=number + 1)
            packet = Ether() / ip / UDP(sport=48173, dport=48173) / Raw(payload)
            packet.time = 1_800_000_000 + 0.05 * number
            out.append(packet)
        at, number = at + size, number + 1
    return out


def frames_of(path):
    audit = pcaptool.audit(path, profile=PROFILE)
    frames, errors, links, summary = audit.frames, audit.errors, audit.links, audit.summary
    audit.close()
    return frames, errors, links, summary


def test_frames_come_out_of_the_stream_with_every_channel_error(sent, tmp_path):
    bits, begin = sent
    rng = np.random.default_rng(1)
    wrong = np.flatnonzero(rng.random(len(bits)) < 0.01)
    came = bits.copy()
    came[wrong] ^= 1
    wrpcap(str(tmp_path / "a.pcap"), packets(came, rng))
    frames, errors, links, summary = frames_of(tmp_path / "a.pcap")
    assert frames["state"].tolist() == ["corrected"] * FRAMES
    assert frames["counter"].tolist() == [(250 + i) % 256 for i in range(FRAMES)]
    assert (frames["air_bits"] == FRAME_BITS).all()
    assert links["link"].tolist() == ["341/3"] and links["lost"].tolist() == [0]
    assert summary["ledger"]["frames"] == summary["ledger"]["records"]
    found = begin + errors["frame"].to_numpy() * FRAME_BITS + errors["position"].to_numpy()
    true = wrong[(wrong >= begin) & (wrong < begin + FRAMES * FRAME_BITS)]
    assert found.tolist() == true.tolist()


def test_a_missing_datagram_breaks_the_stream_and_shows(sent, tmp_path):
    bits, _ = sent
    rng = np.random.default_rng(2)
    wrpcap(str(tmp_path / "a.pcap"), packets(bits, rng, lose={9}))
    frames, _, links, summary = frames_of(tmp_path / "a.pcap")
    lost = FRAMES - len(frames)
    assert 1 <= lost <= 2 and (frames["state"] == "intact").all()
    assert links["lost"].tolist() == [lost]             # how many of them on the air, a broken stream cannot tell
    assert links["lost_undecided"].tolist() == [lost] and links["lost_air"].tolist() == [0]
    assert any("missing datagrams broke streams 1 times" in note for note in summary["notes"])


def test_streams_do_not_depend_on_how_captures_are_cut(sent, tmp_path):
    bits, _ = sent
    rng = np.random.default_rng(3)
    came = bits ^ (rng.random(len(bits)) < 0.01).astype(np.uint8)
    every = packets(came, rng, lose={20}) + packets(bits[5000:], rng, source="192.0.2.11", first=7)
    every.sort(key=lambda p: p.time)
    (tmp_path / "whole").mkdir()
    wrpcap(str(tmp_path / "whole" / "a.pcap"), every)
    whole, errors, links, _ = frames_of(tmp_path / "whole")
    parts = tmp_path / "parts"
    parts.mkdir()
    for i in range(0, len(every), 11):
        wrpcap(str(parts / f"{i:03}.pcap"), every[i : i + 11])
    again, errors_again, links_again, _ = frames_of(parts)
    left = ["capture", "packet"]
    assert whole.drop(columns=left).to_csv() == again.drop(columns=left).to_csv()
    assert errors.to_csv() == errors_again.to_csv()
    assert links.to_csv() == links_again.to_csv()
    assert len(whole) > FRAMES


def test_a_long_stream_is_searched_in_parts_as_in_one(sent, tmp_path, monkeypatch):
    bits, _ = sent
    rng = np.random.default_rng(4)
    came = bits ^ (rng.random(len(bits)) < 0.005).astype(np.uint8)
    wrpcap(str(tmp_path / "a.pcap"), packets(came, rng))
    whole, errors, _, _ = frames_of(tmp_path / "a.pcap")
    monkeypatch.setattr("pcaptool.frames.stream.MOST", 9000)
    parts, errors_of_parts, _, _ = frames_of(tmp_path / "a.pcap")
    assert whole.to_csv() == parts.to_csv() and errors.to_csv() == errors_of_parts.to_csv()
    assert len(whole) == FRAMES
