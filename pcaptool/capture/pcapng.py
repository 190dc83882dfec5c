"""Walk the blocks of a pcapng file: sections, interfaces, packets, statistics.

Source: draft-ietf-opsawg-pcapng. Packet blocks are read, and blocks of no concern passed over, in a
kernel; section headers, interfaces and statistics, of which there are few, one by one.
"""

import struct
from collections.abc import Iterator

import numpy as np
from numba import njit
from numpy.typing import NDArray

from pcaptool.capture.walk import DAMAGED, FULL, MORE, Number, u32

SECTION, INTERFACE, OBSOLETE_PACKET, SIMPLE_PACKET, STATISTICS, ENHANCED_PACKET, SECRETS = (
    0x0A0D0D0A, 1, 2, 3, 5, 6, 10)
MAGIC = 0x1A2B3C4D
OTHER = 3                       # why the walk stopped: a block that is read one by one
LARGEST_BLOCK = 1 << 24
TSRESOL, TSOFFSET, DROPCOUNT, IFDROP, OSDROP = 9, 14, 4, 5, 7     # options
MOST_DROPS = 1 << 48            # a count above tells nothing
SECOND = 1_000_000_000          # ns
LATEST = 1 << 62                # ns; times are held within that of 1970


@njit(cache=True, nogil=True)
def to_ns(high: Number, low: Number, resolution: Number, offset: Number) -> Number:
    """Return a time stamp of 2 * 32 bits in ns, held within LATEST.

    resolution  octet of if_tsresol: a negative power of 10, or with the top bit of 2
    offset      seconds
    """
    power: Number = np.int64(resolution & 127)
    ticks = np.uint64(high) << np.uint64(32) | np.uint64(low)
    seconds, ns = np.uint64(0), ticks           # the whole seconds, and what is left
    if resolution & 128:
        if power < 64:
            seconds = ticks >> np.uint64(power)
            ns = ticks - (seconds << np.uint64(power))
        ns = ns >> np.uint64(min(max(power - 34, 0), 63))       # 2**34 * 1e9 is less than 2**64
        ns = (ns * np.uint64(SECOND)) >> np.uint64(min(power, 34))
    else:
        if power < 20:                          # 10**20 is more than 2**64
            unit = np.uint64(1)
            for _ in range(power):
                unit *= np.uint64(10)
            seconds, ns = ticks // unit, ticks % unit
        for _ in range(power - 9):
            ns = ns // np.uint64(10)
        for _ in range(9 - power):
            ns = ns * np.uint64(10)
    about = np.float64(seconds) + np.float64(offset)
    if abs(about) >= LATEST // SECOND:
        return LATEST if about > 0 else -LATEST
    return (np.int64(seconds) + offset) * SECOND + np.int64(ns)


@njit(cache=True, nogil=True)
def walk_blocks(
    b: NDArray[np.uint8], at: int, end: int, big: bool, interfaces: NDArray[np.int64], n_interfaces: int,
    start: NDArray[np.int64], held: NDArray[np.int64], size: NDArray[np.int64], time: NDArray[np.int64],
    link: NDArray[np.int32], last: int, drops: NDArray[np.int64],
) -> tuple[int, int, int, int]:
    """Walk blocks from ``at``; return (packets, where the next begins, why it stopped, bytes passed over).

    interfaces  int64 (interface, 4)  link type, resolution octet, offset in seconds, snap length
    last        ns; the time given to simple packets, which carry none
    drops       int64 (2,)  sum of drop counts in packet blocks, and how many there were; changed
    """
    n, most, passed = 0, len(start), 0
    while True:
        if n == most:
            return n, at, FULL, passed
        if at + 12 > end:
            return n, at, MORE, passed
        kind, total = u32(b, at, big), u32(b, at + 4, big)
        if kind == SECTION:                 # its byte order may be another one
            return n, at, OTHER, passed
        if total < 12 or total % 4 or total > LARGEST_BLOCK:
            return n, at, DAMAGED, passed
        if at + total > end:
            return n, at, MORE, passed
        if u32(b, at + total - 4, big) != total:
            return n, at, DAMAGED, passed
        if kind == INTERFACE or kind == STATISTICS:
            return n, at, OTHER, passed
        if kind == SIMPLE_PACKET:
            if n_interfaces == 0 or total < 16:
                return n, at, DAMAGED, passed
            interface, wire, data = 0, u32(b, at + 8, big), at + 12
            snap = interfaces[0, 3]
            captured = min(min(wire, snap) if snap > 0 else wire, total - 16)
            stamp = time[n - 1] if n else last
        elif kind == ENHANCED_PACKET or kind == OBSOLETE_PACKET:
            if total < 32:
                return n, at, DAMAGED, passed
            interface, dropped = u32(b, at + 8, big), 0xFFFF
            if kind == OBSOLETE_PACKET:
                dropped = interface & 0xFFFF if big else interface >> 16
                interface = interface >> 16 if big else interface & 0xFFFF
            captured, wire, data = u32(b, at + 20, big), u32(b, at + 24, big), at + 28
            if interface >= n_interfaces or captured > total - 32 or captured > wire:
                return n, at, DAMAGED, passed
            if dropped != 0xFFFF:
                drops[0] += dropped
                drops[1] += 1
            stamp = to_ns(u32(b, at + 12, big), u32(b, at + 16, big), interfaces[interface, 1],
                          interfaces[interface, 2])
            option = data + (captured + 3) // 4 * 4
            while kind == ENHANCED_PACKET and option + 4 <= at + total - 4:
                word = u32(b, option, big)
                code, length = (word >> 16, word & 0xFFFF) if big else (word & 0xFFFF, word >> 16)
                if code == 0:
                    break
                if code == DROPCOUNT and length == 8 and option + 12 <= at + total - 4:
                    first, second = u32(b, option + 4, big), u32(b, option + 8, big)
                    count = first << 32 | second if big else second << 32 | first
                    if 0 <= count < MOST_DROPS:
                        drops[0] += count
                        drops[1] += 1
                option += 4 + (length + 3) // 4 * 4
        else:
            passed += total
            at += total
            continue
        start[n], held[n], size[n], time[n] = data, captured, wire, stamp
        link[n] = interfaces[interface, 0]
        n += 1
        at += total


@njit(cache=True, nogil=True)
def find_block(b: NDArray[np.uint8], at: int, end: int, final: bool, big: bool) -> tuple[int, bool]:
    """Return (place, found) of the next believable block: of a known type, its length there twice.

    final  the file ends at ``end``; otherwise a place that needs more bytes to judge is returned,
           not found, to be looked at again
    """
    while at + 12 <= end:
        kind = u32(b, at, big)
        order, least = big, 16
        if kind == SECTION:
            order, least = b[at + 8] == 0x1A, 28
        elif kind == ENHANCED_PACKET or kind == OBSOLETE_PACKET:
            least = 32
        elif kind == INTERFACE:
            least = 20
        known = kind == SECTION or (1 <= kind <= ENHANCED_PACKET) or kind == SECRETS
        total = u32(b, at + 4, order)
        if known and least <= total <= LARGEST_BLOCK and total % 4 == 0:
            if at + total > end:
                if not final:
                    return at, False
            elif u32(b, at + total - 4, order) == total:
                return at, True
        at += 1
    return (end if final else at), False


class Section:
    """What a section has said so far of its interfaces and their drops.

    interfaces  int64 (interface, 4)  as walk_blocks takes them; the first ``count`` rows are in use
    dropped     interface -> drops by its latest statistics
    """

    def __init__(self, big: bool) -> None:
        self.big = big
        self.count = 0
        self.interfaces = np.zeros((8, 4), np.int64)
        self.dropped: dict[int, int] = {}

    def block(self, data: bytes) -> str:
        """Take in an interface or statistics block; return a reason if it is malformed."""
        order = ">" if self.big else "<"
        kind, total = struct.unpack(order + "II", data[:8])
        if kind == INTERFACE:
            if total < 20:
                return "interface block too short"
            link, _, snap = struct.unpack(order + "HHI", data[8:16])
            resolution, offset = 6, 0
            for code, value in self._options(data[16:-4]):
                if code == TSRESOL and value:
                    resolution = value[0]
                elif code == TSOFFSET and len(value) == 8:
                    offset = struct.unpack(order + "q", value)[0]
            if self.count == len(self.interfaces):
                self.interfaces = np.concatenate([self.interfaces, np.zeros_like(self.interfaces)])
            self.interfaces[self.count] = link, resolution, offset, snap
            self.count += 1
            return ""
        if total < 24:
            return "statistics block too short"
        interface = struct.unpack(order + "I", data[8:12])[0]
        counts = [struct.unpack(order + "Q", value)[0] for code, value in self._options(data[20:-4])
                  if code in (IFDROP, OSDROP) and len(value) == 8]
        counts = [count for count in counts if count < MOST_DROPS]
        if counts:
            self.dropped[interface] = sum(counts)
        return ""

    def _options(self, data: bytes) -> Iterator[tuple[int, bytes]]:
        order, at = ">" if self.big else "<", 0
        while at + 4 <= len(data):
            code, length = struct.unpack_from(order + "HH", data, at)
            if code == 0:
                return
            yield code, data[at + 4 : at + 4 + length]
            at += 4 + -(-length // 4) * 4


def section_of(head: bytes) -> Section | None:
    """Return a fresh section for the first 12 bytes of a section header, None if it is none."""
    if len(head) < 12 or head[:4] != b"\x0a\x0d\x0d\x0a":
        return None
    for big, order in ((True, ">"), (False, "<")):
        if struct.unpack(order + "I", head[8:12])[0] == MAGIC:
            return Section(big)
    return None
