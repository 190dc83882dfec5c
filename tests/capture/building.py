"""Captures put together octet by octet, and what the capture layer reads of them, for the tests."""

import json
import struct
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from pcaptool.capture import Account, Datagrams, OpenFragment, Piece, join_fragments, read_datagrams

PUBLISHED: dict[str, list[dict[str, Any]]] = json.loads(
    Path(__file__).with_name("published.json").read_text(encoding="utf-8"))
START = 1_700_000_000           # s


class Row(NamedTuple):
    """A datagram as the capture layer gives it."""

    packet: int
    records: int
    time: int
    order: int
    source: bytes
    destination: bytes
    ports: tuple[int, int]
    size: int
    payload: bytes


def rows_of(d: Datagrams) -> list[Row]:
    """Return the rows of a batch, taken out of its buffer."""
    rows = []
    for i in range(len(d)):
        octets = 4 if d.version[i] == 4 else 16
        source, destination = (int(a[i, 0]) << 64 | int(a[i, 1]) for a in (d.source, d.destination))
        payload = d.buffer[d.start[i] : d.start[i] + d.held[i]].tobytes()
        rows.append(Row(int(d.packet[i]), int(d.records[i]), int(d.time[i]), int(d.order[i]),
                        source.to_bytes(octets, "big"), destination.to_bytes(octets, "big"),
                        (int(d.source_port[i]), int(d.destination_port[i])), int(d.size[i]), payload))
    return rows


def read(what: Path | Piece, batch_bytes: int = 1 << 16) -> tuple[list[Row], Account]:
    """Return (rows, account) of a capture, after checking that its ledger adds up, bytes and records."""
    reader = read_datagrams(what, batch_bytes)
    rows = [row for batch in reader for row in rows_of(batch)]
    a = reader.account
    assert sum(a.entries.values()) + sum(r.records for r in rows) + len(a.open_fragments) == a.records
    assert min(a.entries.values()) >= 0
    assert a.size == a.record_bytes + a.other_bytes + a.damaged_bytes
    assert a.damaged_bytes == sum(d.skipped for d in a.damage)
    return rows, a


def read_pieces(pieces: Iterable[Piece]) -> tuple[list[Row], dict[str, int], list[Any]]:
    """Return (rows in canonical order, entries, damage) of a capture read piece by piece."""
    rows: list[Row] = []
    left: list[OpenFragment] = []
    entries: dict[str, int] = {}
    damage: list[Any] = []
    shift, before = 0, None
    for piece in pieces:
        reader = read_datagrams(piece, 1 << 12)
        found = [row for batch in reader for row in rows_of(batch)]
        a = reader.account
        if before is not None and reader.begin_time is not None and before - reader.begin_time > 1_000_000_000:
            shift += before - reader.begin_time
        before = before if reader.end_time is None else reader.end_time
        for fragment in a.open_fragments:
            fragment.order += shift
        rows += [row._replace(order=row.order + shift) for row in found]
        left += a.open_fragments
        shift += a.order_shift
        damage += a.damage
        for name, count in a.entries.items():
            entries[name] = entries.get(name, 0) + count
    datagrams, joined = join_fragments(sorted(left, key=lambda f: (f.order, f.packet)))
    assert sum(len(f) for f in joined.values()) == len(left)
    assert len(joined.pop("frames")) == int(datagrams.records.sum())
    for name, fragments in joined.items():
        entries[name] = entries.get(name, 0) + len(fragments)
    return sorted(rows + rows_of(datagrams)), entries, damage


def pcap(packets: Iterable[bytes | tuple[bytes, int]], link: int = 1, order: str = "<", unit_ns: int = 1000,
         times: Sequence[int] | None = None, snap: int = 262_144) -> bytes:
    """Return a classic pcap file.

    packets  octets held, or (octets held, octets on the wire)
    times    ns since 1970; by default a second apart
    """
    out = [struct.pack(order + "IHHiIII", 0xA1B2C3D4 if unit_ns == 1000 else 0xA1B23C4D, 2, 4, 0, 0, snap, link)]
    for i, packet in enumerate(packets):
        data, wire = packet if isinstance(packet, tuple) else (packet, len(packet))
        time = times[i] if times is not None else (START + i) * 10**9
        out.append(struct.pack(order + "IIII", time // 10**9, time % 10**9 // unit_ns, len(data), wire) + data)
    return b"".join(out)


def block(kind: int, body: bytes, order: str = "<") -> bytes:
    """Return a pcapng block."""
    body += bytes(-len(body) % 4)
    total = struct.pack(order + "I", len(body) + 12)
    return struct.pack(order + "I", kind) + total + body + total


def option(code: int, value: bytes, order: str = "<") -> bytes:
    return struct.pack(order + "HH", code, len(value)) + value + bytes(-len(value) % 4)


def section(order: str = "<") -> bytes:
    return block(0x0A0D0D0A, struct.pack(order + "IHHq", 0x1A2B3C4D, 1, 0, -1), order)


def interface(link: int = 1, snap: int = 0, options: bytes = b"", order: str = "<") -> bytes:
    return block(1, struct.pack(order + "HHI", link, 0, snap) + options, order)


def enhanced(data: bytes, ticks: int, number: int = 0, wire: int | None = None, options: bytes = b"",
             order: str = "<") -> bytes:
    head = struct.pack(order + "IIIII", number, ticks >> 32, ticks & 0xFFFFFFFF, len(data),
                       len(data) if wire is None else wire)
    return block(6, head + data + bytes(-len(data) % 4) + options, order)


def ipv4(payload: bytes, protocol: int = 17, ident: int = 1, flags_offset: int = 0, options: bytes = b"",
         source: bytes = b"\x0a\x3d\0\1", destination: bytes = b"\x0a\x3d\0\2") -> bytes:
    """Return an IPv4 packet (header checksum left 0)."""
    length = 20 + len(options) + len(payload)
    return struct.pack(">BBHHHBBH", 0x45 + len(options) // 4, 0, length, ident, flags_offset, 64, protocol, 0) \
        + source + destination + options + payload


def ipv6(payload: bytes, following: int = 17, source: bytes = b"\x20" + bytes(14) + b"\1",
         destination: bytes = b"\x20" + bytes(14) + b"\2") -> bytes:
    return struct.pack(">IHBB", 0x60000000, len(payload), following, 64) + source + destination + payload


def udp(payload: bytes, ports: tuple[int, int] = (47310, 5000), length: int | None = None) -> bytes:
    return struct.pack(">HHHH", *ports, len(payload) + 8 if length is None else length, 0) + payload


def ethernet(packet: bytes, kind: int = 0x0800, tags: Sequence[int] = ()) -> bytes:
    """Return an Ethernet frame; tags are the ethertypes of VLAN tags round it, outermost first."""
    stack = b"".join(struct.pack(">HH", tag, 7) for tag in tags)
    return bytes.fromhex("02000000000202000000 0001") + stack + struct.pack(">H", kind) + packet


def payloads(n: int, seed: int = 1, most: int = 60) -> list[bytes]:
    rng = np.random.default_rng(seed)
    return [rng.integers(0, 256, int(rng.integers(1, most)), np.uint8).tobytes() for _ in range(n)]
