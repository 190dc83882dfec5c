"""Traffic that is not ours, for the ledger: address resolution, queries, time of day, a TCP segment."""

import struct

import numpy as np

from pcaptool.simulate.writer import Pieces, pieces, udp_packets

NET = 0xC0000200            # 192.0.2.0, documentation addresses (RFC 5737)
SERVER = NET + 1


def _packet(source: int, payload: bytes, port: int, ident: int) -> bytes:
    """Return a UDP packet to the server."""
    one = [np.array([v], np.int64) for v in (source, SERVER, port, ident)]
    return udp_packets(pieces([payload]), *one).buffer.tobytes()


def _query(rng: np.random.Generator) -> bytes:
    """Return a name query of invented hosts. Source: RFC 1035 (1987), 4.1."""
    host = b"\x05gauge\x0amerrowdale\x07example\x00"
    head = struct.pack(">HHHHHH", int(rng.integers(1 << 16)), 0x0100, 1, 0, 0, 0)
    return head + host + struct.pack(">HH", 1, 1)


def foreign_packet(rng: np.random.Generator, k: int) -> bytes:
    """Return packet number k of other traffic, as Ethernet bytes; kinds come in turn."""
    me = NET + int(rng.integers(10, 60))
    match k % 4:
        case 0:             # RFC 826
            station = b"\x02\0" + struct.pack(">I", me)
            body = struct.pack(">HHBBH", 1, 0x0800, 6, 4, 1) + station + struct.pack(">I", me) + bytes(6)
            return b"\xff" * 6 + station + b"\x08\x06" + body + struct.pack(">I", SERVER) + bytes(18)
        case 1:
            return _packet(me, _query(rng), 53, k)
        case 2:             # RFC 5905, client, version 4
            return _packet(me, b"\x23" + rng.bytes(47), 123, k)
    body = rng.bytes(int(rng.integers(20, 200)))
    segment = struct.pack(">HHIIBBHHH", 51000 + k % 1000, 443, k, 0, 0x50, 0x18, 4096, 0, 0) + body
    return _with_sums(me, segment, k)


def _with_sums(source: int, segment: bytes, ident: int) -> bytes:
    """Return a TCP segment (RFC 9293) in IPv4 and Ethernet, with its checksums."""
    addresses = struct.pack(">II", source, SERVER)
    check = _checksum(addresses + struct.pack(">HH", 6, len(segment)) + segment)
    segment = segment[:16] + struct.pack(">H", check) + segment[18:]
    head = struct.pack(">BBHHHBBH", 0x45, 0, 20 + len(segment), ident & 0xFFFF, 0x4000, 64, 6, 0) + addresses
    head = head[:10] + struct.pack(">H", _checksum(head)) + head[12:]
    return b"\x02\0\0\0\0\x01\x02\0" + struct.pack(">I", source) + b"\x08\0" + head + segment


def _checksum(data: bytes) -> int:
    """Return the Internet checksum. Source: RFC 1071 (1988)."""
    total: int = sum(struct.unpack(f">{(len(data) + 1) // 2}H", data + b"\0" * (len(data) % 2)))
    while total >> 16:
        total = (total & 0xFFFF) + (total >> 16)
    return total ^ 0xFFFF


def foreign_packets(rng: np.random.Generator, number: int) -> Pieces:
    """Return some packets of other traffic."""
    return pieces([foreign_packet(rng, k) for k in range(number)])
