"""Simulated captures taken apart by dpkt and struct, and their truth, for the tests."""

import csv
import io
import struct
from collections.abc import Sequence
from typing import NamedTuple

import dpkt

from pcaptool.simulate import Simulation


class Datagram(NamedTuple):
    """One captured packet of UDP."""

    time: int           # ns
    source: str
    payload: bytes
    ident: int


def captured(data: bytes) -> list[Datagram | None]:
    """Return the packets of a capture in order; None for those that are not UDP over IPv4."""
    reader = dpkt.pcap.Reader(io.BytesIO(data))
    out: list[Datagram | None] = []
    for time, frame in reader:
        ip = dpkt.ethernet.Ethernet(frame).data
        if not isinstance(ip, dpkt.ip.IP) or not isinstance(ip.data, dpkt.udp.UDP):
            out.append(None)
            continue
        out.append(Datagram(round(time * 10**9), ".".join(map(str, ip.src)), bytes(ip.data.data), ip.id))
    return out


def truth_of(text: str) -> list[dict[str, str]]:
    """Return the rows of a truth in CSV."""
    return list(csv.DictReader(io.StringIO(text)))


def rows(simulation: Simulation) -> list[dict[str, str]]:
    """Return the truth of a simulation, through its CSV."""
    return truth_of(simulation.truth())


class Wrapped(NamedTuple):
    """A datagram of the shipped profile merrowdale, by the layout that its file gives."""

    mark: int
    gateway: int
    datagram: int
    level: int
    size: int
    air: bytes


def merrowdale(payload: bytes) -> Wrapped:
    """Take a datagram of the profile merrowdale apart."""
    return Wrapped(*struct.unpack(">HBHbB", payload[:7]), payload[7:])


def positions(row: dict[str, str]) -> list[int]:
    """Return the flipped bits of a row of the truth."""
    return [int(word) for word in row["positions"].split(";") if word]


def flipped(clean: bytes, bits: Sequence[int]) -> bytes:
    """Return octets with some bits flipped, counted from the most significant of the first."""
    out = bytearray(clean)
    for bit in bits:
        out[bit // 8] ^= 0x80 >> bit % 8
    return bytes(out)
