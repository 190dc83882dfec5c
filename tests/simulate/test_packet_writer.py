"""Packets and captures, read again by two independent readers."""

import gzip
import io
import struct
from pathlib import Path

import dpkt
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scapy.layers.inet import IP, UDP
from scapy.layers.l2 import ARP, Ether
from scapy.packet import Packet
from scapy.utils import PcapReader

from pcaptool.simulate.foreign import foreign_packets
from pcaptool.simulate.writer import copy_pieces, gzipped, pcap_bytes, pieces, udp_packets, write_file

T0 = 1_772_323_200_000_000_000      # 2026-03-01T00:00:00Z


def packets_of(payloads: list[bytes]):     # type: ignore[no-untyped-def]
    n = len(payloads)
    return udp_packets(pieces(payloads), np.arange(n) + 0x0A3D000B, np.full(n, 0x0A3D0001), np.full(n, 47310),
                       np.arange(n) + 65_530)


def with_right_sums(packet: Packet) -> bytes:
    """Return a packet as scapy writes it with checksums and lengths of its own."""
    again = packet.copy()
    for layer in (IP, UDP, "TCP"):
        if again.haslayer(layer):
            del again[layer].chksum
            if layer != "TCP":
                del again[layer].len
    return bytes(again)


@settings(max_examples=25)
@given(st.lists(st.binary(max_size=70), max_size=12))
def test_both_readers_find_the_payloads_and_good_checksums(payloads: list[bytes]) -> None:
    packets = packets_of(payloads)
    times = T0 + np.arange(len(payloads)) * 1_000_001_000
    data = pcap_bytes(packets, times)
    seen = [(t, dpkt.ethernet.Ethernet(frame).data) for t, frame in dpkt.pcap.Reader(io.BytesIO(data))]
    assert [bytes(ip.data.data) for _, ip in seen] == payloads
    assert [ip.id for _, ip in seen] == [(65_530 + i) % 65_536 for i in range(len(payloads))]
    with PcapReader(io.BytesIO(data)) as reader:
        scapy = list(reader)
    assert [bytes(p[UDP].payload) for p in scapy] == payloads
    for i, p in enumerate(scapy):
        assert with_right_sums(p) == bytes(p.original)
        assert (p[IP].src, p[IP].dst) == (f"10.61.0.{11 + i}", "10.61.0.1") and p[UDP].dport == 47310
        assert int(p.time * 10**6) == int(times[i]) // 1000


def test_a_sum_of_nought_is_sent_as_all_ones() -> None:
    """RFC 768: a computed checksum of zero is transmitted as all ones; zero would mean none."""
    n = 1 << 16
    everything = np.arange(n).astype(">u2").tobytes()
    one = np.full(n, 0x0A3D000B)
    payloads = pieces([everything[2 * i : 2 * i + 2] for i in range(n)])
    packets = udp_packets(payloads, one, one, np.full(n, 47310), one)
    sums = packets.buffer.reshape(n, -1)[:, 40:42].astype(np.int64) @ [256, 1]
    assert (sums != 0).all() and 1 <= (sums == 0xFFFF).sum() <= 2


def test_times_and_headers_are_written_as_the_format_says() -> None:
    # Octets by hand, after the description of the classic format in draft-ietf-opsawg-pcap: magic,
    # version 2.4, two zeros, snap length, link type 1; then seconds, fraction, kept and true length.
    packets = pieces([b"\x01" * 60, b"\x02" * 100])
    times = np.array([T0 + 1_234_567_891, T0 + 2_000_000_000])
    for byte_order, order in (("little", "<"), ("big", ">")):
        for nanoseconds, magic, fraction in ((False, 0xA1B2C3D4, 234_567), (True, 0xA1B23C4D, 234_567_891)):
            data = pcap_bytes(packets, times, snap_length=80, nanoseconds=nanoseconds,
                              byte_order=byte_order)         # type: ignore[arg-type]
            assert data[:24] == struct.pack(order + "IHHiIII", magic, 2, 4, 0, 0, 80, 1)
            assert data[24:40] == struct.pack(order + "IIII", 1_772_323_201, fraction, 60, 60)
            assert data[40:100] == b"\x01" * 60
            assert data[100:116] == struct.pack(order + "IIII", 1_772_323_202, 0, 80, 100)
            assert data[116:] == b"\x02" * 80
            assert len(list(dpkt.pcap.Reader(io.BytesIO(data)))) == 2


def test_an_empty_capture_is_a_header() -> None:
    assert len(pcap_bytes(packets_of([]), np.zeros(0, np.int64))) == 24


@given(st.lists(st.binary(max_size=9), max_size=20), st.randoms(use_true_random=False))
def test_pieces_are_copied_to_any_place(parts: list[bytes], random) -> None:    # type: ignore[no-untyped-def]
    source = pieces(parts)
    order = list(range(len(parts)))
    random.shuffle(order)
    size = source.size[order]
    target = np.zeros(int(size.sum()), np.uint8)
    copy_pieces(target, size.cumsum() - size, source.buffer, source.start[order], size)
    assert target.tobytes() == b"".join(parts[i] for i in order)


@pytest.mark.parametrize("data", [b"", b"abc", bytes(100_000)])
def test_compressed_files_are_the_same_every_time(tmp_path: Path, data: bytes) -> None:
    path = tmp_path / "a.pcap.gz"
    write_file(path, data)
    first = path.read_bytes()
    write_file(path, data)
    assert path.read_bytes() == first == gzipped(data)
    assert gzip.decompress(first) == data and first[4:8] == bytes(4)
    assert [p.name for p in tmp_path.iterdir()] == ["a.pcap.gz"]


def test_foreign_traffic_is_what_it_says() -> None:
    packets = foreign_packets(np.random.default_rng(3), 8)
    for i in range(8):
        raw = packets.buffer[packets.start[i] : packets.start[i] + packets.size[i]].tobytes()
        p = Ether(raw)
        assert with_right_sums(p) == raw
        if i % 4 == 0:
            assert p.haslayer(ARP) and p[ARP].op == 1 and len(raw) == 60
        else:
            assert p.sprintf("%IP.proto%") == ("tcp" if i % 4 == 3 else "udp")
            assert i % 4 == 3 or p[UDP].dport == {1: 53, 2: 123}[i % 4]
            assert p[IP].src.startswith("192.0.2.")
