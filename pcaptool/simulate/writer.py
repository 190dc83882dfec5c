"""Payloads to packets to a classic pcap file, for all packets at once, all checksums right."""

import struct
import zlib
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from pcaptool.table import write_whole

Octets = NDArray[np.uint8]
Ints = NDArray[np.int64]

ETHERNET, IPV4, UDP = 14, 20, 8
HEADERS = ETHERNET + IPV4 + UDP         # before the payload, bytes
LONGEST = 65_535 - IPV4 - UDP           # payload of an IPv4 datagram, bytes
CHUNK = 1 << 22                         # bytes moved at once
BATCH = 1 << 15                         # packets summed at once
WHOLE = 262_144                         # snap length that cuts nothing


@dataclass(slots=True)
class Pieces:
    """Byte strings that lie one behind the other: buffer uint8 (byte,), start and size int64 (piece,)."""

    buffer: Octets
    start: Ints
    size: Ints

    def __len__(self) -> int:
        return len(self.size)


def pieces(parts: list[bytes]) -> Pieces:
    """Return some byte strings as pieces."""
    size = np.array([len(p) for p in parts], np.int64)
    return Pieces(np.frombuffer(b"".join(parts), np.uint8), size.cumsum() - size, size)


def copy_pieces(target: Octets, at: Ints, source: Octets, start: Ints, size: Ints) -> None:
    """Copy source[start : start + size] to target[at : at + size], piece by piece."""
    behind = size.cumsum()
    first = 0
    while first < len(size):
        done = behind[first - 1] if first else 0
        last = max(int(np.searchsorted(behind, done + CHUNK)), first + 1)
        part = size[first:last]
        inner = np.arange(part.sum()) - np.repeat(part.cumsum() - part, part)
        target[np.repeat(at[first:last], part) + inner] = source[np.repeat(start[first:last], part) + inner]
        first = last


def put_field(target: Octets, at: Ints, value: Ints, size: int, order: str) -> None:
    """Write numbers of some bytes, cut to them; order big or little."""
    for k in range(size):
        shift = 8 * (size - 1 - k) if order == "big" else 8 * k
        target[at + k] = value >> shift & 255


def _folded(total: Ints) -> Ints:
    """Return sums of 16-bit words as one's complement sums. Source: RFC 1071 (1988), section 1."""
    while (total >> 16).any():
        total = (total & 0xFFFF) + (total >> 16)
    return total


def _word_sums(buffer: Octets, start: Ints, size: Ints) -> Ints:
    """Return the sums of the 16-bit words of neighbouring pieces, an odd last byte padded: int64 (piece,)."""
    part = buffer[start[0] : start[-1] + size[-1]].astype(np.int64)
    inner = np.arange(len(part)) - np.repeat(start - start[0], size)
    part[inner % 2 == 0] <<= 8
    sums = np.append(0, part.cumsum())
    words: Ints = sums[start - start[0] + size] - sums[start - start[0]]
    return words


def udp_packets(payload: Pieces, source: Ints, destination: Ints, port: Ints, ident: Ints) -> Pieces:
    """Return Ethernet, IPv4 (RFC 791) and UDP (RFC 768) round payloads.

    source, destination  int64 (packet,)  IPv4 addresses as numbers
    port                 int64 (packet,)  at both ends
    ident                int64 (packet,)  identification of the IPv4 header, cut to 16 bits
    """
    n, size = len(payload), payload.size
    head = np.zeros((n, HEADERS // 2), np.int64)        # 16-bit words
    head[:, 0], head[:, 2] = 0x0200, 0x0001             # to 02:00:00:00:00:01
    head[:, 3], head[:, 4], head[:, 5] = 0x0200, source >> 16, source & 0xFFFF
    head[:, 6], head[:, 7] = 0x0800, 0x4500
    head[:, 8], head[:, 9] = IPV4 + UDP + size, ident & 0xFFFF
    head[:, 11] = 64 << 8 | 17
    head[:, 13], head[:, 14] = source >> 16, source & 0xFFFF
    head[:, 15], head[:, 16] = destination >> 16, destination & 0xFFFF
    head[:, 12] = _folded(head[:, 7:17].sum(axis=1)) ^ 0xFFFF
    head[:, 17] = head[:, 18] = port
    head[:, 19] = UDP + size
    length = HEADERS + size
    start = length.cumsum() - length
    buffer = np.zeros(int(length.sum()), np.uint8)
    copy_pieces(buffer, start + HEADERS, payload.buffer, payload.start, size)
    total = np.concatenate([_word_sums(buffer, start[i : i + BATCH], length[i : i + BATCH])
                            for i in range(0, n, BATCH)]) if n else size
    pseudo = head[:, 13:17].sum(axis=1) + 17 + UDP + size
    check = _folded(total + pseudo + head[:, 17:20].sum(axis=1)) ^ 0xFFFF
    head[:, 20] = np.where(check == 0, 0xFFFF, check)   # 0 would mean: no checksum
    buffer[start[:, None] + np.arange(HEADERS)] = head.astype(">u2").view(np.uint8).reshape(n, HEADERS)
    return Pieces(buffer, start, length)


def pcap_bytes(packets: Pieces, time: Ints, *, snap_length: int = 0, nanoseconds: bool = False,
               byte_order: Literal["little", "big"] = "little") -> bytes:
    """Return a classic pcap file of Ethernet packets.

    time         int64 (packet,)  ns since 1970, in the order of the packets
    snap_length  bytes kept of a packet; 0: all
    nanoseconds  resolution of the record times; else microseconds, the rest cut off
    """
    order = "<" if byte_order == "little" else ">"
    snap = snap_length or max(WHOLE, int(packets.size.max(initial=0)))
    magic, unit = (0xA1B23C4D, 1) if nanoseconds else (0xA1B2C3D4, 1000)
    front = struct.pack(order + "IHHiIII", magic, 2, 4, 0, 0, snap, 1)
    kept = np.minimum(packets.size, snap)
    start = len(front) + (kept + 16).cumsum() - (kept + 16)
    out = np.zeros(len(front) + int((kept + 16).sum()), np.uint8)
    out[: len(front)] = np.frombuffer(front, np.uint8)
    record = np.stack([time // 1_000_000_000, time % 1_000_000_000 // unit, kept, packets.size], axis=1)
    octets = record.astype(order + "u4").view(np.uint8).reshape(len(packets), 16)
    out[start[:, None] + np.arange(16)] = octets
    copy_pieces(out, start + 16, packets.buffer, packets.start, kept)
    return out.tobytes()


def write_file(path: Path, data: bytes) -> None:
    """Write a file whole, through gzip when its name ends in .gz."""
    write_whole(path, gzipped(data) if path.suffix == ".gz" else data)


def gzipped(data: bytes) -> bytes:
    """Return a gzip member without time, name and system, so that the same data give the same bytes.

    Source: RFC 1952 (1996), 2.3.
    """
    body = zlib.compress(data, 6, wbits=-zlib.MAX_WBITS)
    head = b"\x1f\x8b\x08\x00" + bytes(4) + b"\x00\xff"
    return head + body + struct.pack("<II", zlib.crc32(data), len(data) & 0xFFFF_FFFF)
