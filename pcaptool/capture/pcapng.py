"""Walk the blocks of a pcapng file: sections, interfaces, packets, statistics.

Source: draft-ietf-opsawg-pcapng. Packet blocks are read in a kernel; the others, of which there are
few, one by one.
"""

import struct
from dataclasses import dataclass, field

import numpy as np
from numba import njit
from numpy.typing import NDArray

from pcaptool.capture.walk import DAMAGED, FULL, MORE, u32

SECTION, INTERFACE, OBSOLETE_PACKET, SIMPLE_PACKET, STATISTICS, ENHANCED_PACKET = (
    0x0A0D0D0A, 1, 2, 3, 5, 6)
MAGIC = 0x1A2B3C4D
OTHER = 3                       # a block that is not a packet
LARGEST_BLOCK = 1 << 24
OPTION_TSRESOL, OPTION_TSOFFSET, OPTION_DROPCOUNT, OPTION_IFDROP, OPTION_OSDROP = 9, 14, 4, 5, 7


@njit(cache=True, nogil=True)
def to_ns(high: int, low: int, resolution: int, offset: int) -> int:
    """Return a time stamp in ns; resolution is the octet of if_tsresol, offset in seconds."""
    ticks = np.uint64(high) << np.uint64(32) | np.uint64(low)
    if resolution & 128:                    # a negative power of two
        shift = np.uint64(resolution & 127)
        whole = np.int64(ticks >> shift) if shift < 64 else 0
        part = ticks & ((np.uint64(1) << shift) - np.uint64(1)) if shift < 64 else ticks
        while shift > np.uint64(33):
            part >>= np.uint64(1)
            shift -= np.uint64(1)
        ns = whole * 1_000_000_000 + np.int64((part * np.uint64(1_000_000_000)) >> shift)
    elif resolution <= 9:
        ns = np.int64(ticks) * np.int64(10) ** np.int64(9 - resolution)
    elif resolution <= 27:
        ns = np.int64(ticks // np.uint64(10) ** np.uint64(min(resolution - 9, 18)))
    else:
        ns = 0
    return ns + offset * 1_000_000_000


@njit(cache=True, nogil=True)
def walk_blocks(
    b: NDArray[np.uint8], at: int, end: int, big: bool, interfaces: NDArray[np.int64], n_interfaces: int,
    start: NDArray[np.int64], held: NDArray[np.int64], size: NDArray[np.int64], time: NDArray[np.int64],
    link: NDArray[np.int32], last: int, drops: NDArray[np.int64],
) -> tuple[int, int, int]:
    """Walk packet blocks from ``at``; return (packets, where the next block begins, why it stopped).

    interfaces  int64 (interface, 4)  link type, resolution octet, offset in seconds, snap length
    last        ns; the time given to simple packets, which carry none
    drops       int64 (2,)  sum of drop counts in packet blocks, and how many there were; changed
    """
    n, most = 0, len(start)
    while True:
        if n == most:
            return n, at, FULL
        if at + 12 > end:
            return n, at, MORE
        kind, total = u32(b, at, big), u32(b, at + 4, big)
        if kind != ENHANCED_PACKET and kind != SIMPLE_PACKET and kind != OBSOLETE_PACKET:
            return n, at, OTHER
        if total < 16 or total % 4 or total > LARGEST_BLOCK:
            return n, at, DAMAGED
        if at + total > end:
            return n, at, MORE
        if u32(b, at + total - 4, big) != total:
            return n, at, DAMAGED
        if kind == SIMPLE_PACKET:
            interface, wire, data = 0, u32(b, at + 8, big), at + 12
            if n_interfaces == 0:
                return n, at, DAMAGED
            snap = interfaces[0, 3]
            captured = min(wire, snap) if snap > 0 else wire
            captured = min(captured, total - 16)
            stamp = time[n - 1] if n else last
        else:
            if total < 32:
                return n, at, DAMAGED
            if kind == ENHANCED_PACKET:
                interface = u32(b, at + 8, big)
            else:
                first = u32(b, at + 8, big)
                interface = first >> 16 if big else first & 0xFFFF
                dropped = first & 0xFFFF if big else first >> 16
                if dropped != 0xFFFF:
                    drops[0] += dropped
                    drops[1] += 1
            captured, wire, data = u32(b, at + 20, big), u32(b, at + 24, big), at + 28
            if interface >= n_interfaces or captured > total - 32 or captured > wire:
                return n, at, DAMAGED
            stamp = to_ns(u32(b, at + 12, big), u32(b, at + 16, big), interfaces[interface, 1],
                          interfaces[interface, 2])
            option = data + (captured + 3) // 4 * 4
            while kind == ENHANCED_PACKET and option + 4 <= at + total - 4:
                code, length = u32(b, option, big) >> 16, u32(b, option, big) & 0xFFFF
                if not big:
                    code, length = length, code
                if code == 0:
                    break
                if code == OPTION_DROPCOUNT and length == 8 and option + 12 <= at + total - 4:
                    high, low = u32(b, option + 4, big), u32(b, option + 8, big)
                    drops[0] += (high << 32 | low) if big else (low << 32 | high)
                    drops[1] += 1
                option += 4 + (length + 3) // 4 * 4
        start[n], held[n], size[n], time[n] = data, captured, wire, stamp
        link[n] = interfaces[interface, 0]
        n += 1
        at += total


@njit(cache=True, nogil=True)
def find_block(b: NDArray[np.uint8], at: int, end: int, final: bool, big: bool) -> tuple[int, bool]:
    """Return (place, found) of the next believable block; as find_record."""
    while at + 12 <= end:
        kind = u32(b, at, big)
        section = kind == SECTION
        order = big
        if section:
            order = b[at + 8] == 0x1A and b[at + 9] == 0x2B
        known = section or kind == INTERFACE or kind == SIMPLE_PACKET or kind == STATISTICS or kind == ENHANCED_PACKET
        if known or kind == OBSOLETE_PACKET:
            total = u32(b, at + 4, order)
            if 16 <= total <= LARGEST_BLOCK and total % 4 == 0:
                if at + total > end:
                    if not final:
                        return at, False
                elif u32(b, at + total - 4, order) == total:
                    return at, True
        at += 1
    return (end if final else at), False


@dataclass(slots=True)
class Section:
    """State of the section being read."""

    big: bool = False
    interfaces: NDArray[np.int64] = field(default_factory=lambda: np.zeros((0, 4), np.int64))
    dropped: dict[int, int] = field(default_factory=dict)   # interface -> drops by its latest statistics
    finest: int = 0

    def block(self, data: bytes) -> str:
        """Take in a block that is no packet; return a reason if it is malformed."""
        order = ">" if self.big else "<"
        kind, total = struct.unpack(order + "II", data[:8])
        if kind == INTERFACE:
            if total < 20:
                return "interface block too short"
            link, _, snap = struct.unpack(order + "HHI", data[8:16])
            resolution, offset = 6, 0
            for code, value in self._options(data[16:-4]):
                if code == OPTION_TSRESOL and value:
                    resolution = value[0]
                elif code == OPTION_TSOFFSET and len(value) == 8:
                    offset = struct.unpack(order + "q", value)[0]
            row = np.array([[link, resolution, offset, snap]], np.int64)
            self.interfaces = np.concatenate([self.interfaces, row])
        elif kind == STATISTICS and total >= 24:
            interface = struct.unpack(order + "I", data[8:12])[0]
            seen = [struct.unpack(order + "Q", value)[0] for code, value in self._options(data[20:-4])
                    if code in (OPTION_IFDROP, OPTION_OSDROP) and len(value) == 8]
            if seen:
                self.dropped[interface] = sum(seen)
        return ""

    def _options(self, data: bytes) -> list[tuple[int, bytes]]:
        order = ">" if self.big else "<"
        options, at = [], 0
        while at + 4 <= len(data):
            code, length = struct.unpack_from(order + "HH", data, at)
            if code == 0:
                break
            options.append((code, data[at + 4 : at + 4 + length]))
            at += 4 + -(-length // 4) * 4
        return options


def section_of(head: bytes) -> Section | None:
    """Return a fresh section for the first 12 bytes of a section header, None if it is none."""
    if len(head) < 12 or head[:4] != b"\x0a\x0d\x0d\x0a":
        return None
    for big, order in ((True, ">"), (False, "<")):
        if struct.unpack(order + "I", head[8:12])[0] == MAGIC:
            return Section(big)
    return None


__all__ = ["DAMAGED", "FULL", "MORE", "OTHER", "Section", "find_block", "section_of", "to_ns", "walk_blocks"]
