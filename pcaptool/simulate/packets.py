"""Payloads to packets to a classic pcap file, all checksums right."""

import gzip
import struct
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np


@dataclass(frozen=True, slots=True)
class Packet:
    """An Ethernet packet with its capture time in ns."""

    time: int
    data: bytes


def _sum16(data: bytes) -> int:
    if len(data) % 2:
        data += b"\0"
    total = int(np.frombuffer(data, ">u2").sum(dtype=np.uint64))
    while total >> 16:
        total = (total & 0xFFFF) + (total >> 16)
    return total


def udp_packet(payload: bytes, source: int, destination: int, source_port: int, destination_port: int, ident: int
               ) -> bytes:
    """Return Ethernet, IPv4 (RFC 791) and UDP (RFC 768) round a payload."""
    udp = struct.pack(">HHHH", source_port, destination_port, 8 + len(payload), 0)
    addresses = struct.pack(">II", source, destination)
    pseudo = addresses + struct.pack(">BBH", 0, 17, 8 + len(payload))
    check = ~_sum16(pseudo + udp + payload) & 0xFFFF or 0xFFFF
    head = struct.pack(">BBHHHBBH", 0x45, 0, 28 + len(payload), ident, 0, 64, 17, 0) + addresses
    head = head[:10] + struct.pack(">H", ~_sum16(head) & 0xFFFF) + head[12:]
    ethernet = bytes.fromhex("020000000001") + b"\x02\0" + struct.pack(">I", source) + b"\x08\0"
    return ethernet + head + udp[:6] + struct.pack(">H", check) + payload


def foreign_packet(rng: np.random.Generator, k: int) -> bytes:
    """Return a packet that is not ours: address resolution, a query, time of day, or a TCP segment."""
    me, you = 0x0A3DFE00 + int(rng.integers(1, 50)), 0x0A3DFE01
    if k % 4 == 0:
        return (b"\xff" * 6 + bytes.fromhex("0200000000640806") + bytes.fromhex("0001080006040001020000000064")
                + struct.pack(">I", me) + bytes(6) + struct.pack(">I", you))
    if k % 4 == 1:
        return udp_packet(rng.bytes(int(rng.integers(20, 60))), me, you, 40000 + k % 1000, 53, k & 0xFFFF)
    if k % 4 == 2:
        return udp_packet(b"\x23" + rng.bytes(47), me, you, 123, 123, k & 0xFFFF)
    body = rng.bytes(int(rng.integers(20, 200)))
    head = struct.pack(">BBHHHBBHII", 0x45, 0, 20 + len(body), k & 0xFFFF, 0x4000, 64, 6, 0, me, you)
    head = head[:10] + struct.pack(">H", ~_sum16(head) & 0xFFFF) + head[12:]
    return bytes.fromhex("0200000000010200000000640800") + head + body


def pcap_bytes(packets: Sequence[Packet], snap_length: int = 0, nanoseconds: bool = False) -> bytes:
    """Return a classic pcap file, little endian; packets are cut at snap_length when it is not 0."""
    snap = snap_length or 262_144
    magic, unit = (0xA1B23C4D, 1) if nanoseconds else (0xA1B2C3D4, 1000)
    parts = [struct.pack("<IHHiIII", magic, 2, 4, 0, 0, snap, 1)]
    for p in packets:
        seconds, rest = divmod(p.time, 1_000_000_000)
        data = p.data[:snap]
        parts.append(struct.pack("<IIII", seconds, rest // unit, len(data), len(p.data)) + data)
    return b"".join(parts)


def write_capture(path: Path, data: bytes) -> None:
    """Write a capture, through gzip when the name ends in .gz; the same bytes every time."""
    if path.suffix == ".gz":
        data = gzip.compress(data, 6, mtime=0)
    path.write_bytes(data)
