"""The two capture formats behind one face: where records lie in a buffer, and where to go on behind damage."""

import struct
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from pcaptool.capture import pcapng, walk
from pcaptool.capture.datagrams import Account
from pcaptool.capture.pcapng import section_of

BATCH_RECORDS = 1 << 15
LEAST_LIMIT, LARGEST_LIMIT = 262_144, 1 << 20       # bytes of a record that can be
PCAP_MAGICS = {
    b"\xa1\xb2\xc3\xd4": (True, 1000), b"\xd4\xc3\xb2\xa1": (False, 1000),
    b"\xa1\xb2\x3c\x4d": (True, 1), b"\x4d\x3c\xb2\xa1": (False, 1),
}
SCALES = {0: "s", 3: "ms", 6: "us", 9: "ns"}


@dataclass(slots=True)
class Records:
    """Records found by one call, as arrays that are used again by the next."""

    start: NDArray[np.int64] = field(default_factory=lambda: np.empty(BATCH_RECORDS, np.int64))
    held: NDArray[np.int64] = field(default_factory=lambda: np.empty(BATCH_RECORDS, np.int64))
    size: NDArray[np.int64] = field(default_factory=lambda: np.empty(BATCH_RECORDS, np.int64))
    time: NDArray[np.int64] = field(default_factory=lambda: np.empty(BATCH_RECORDS, np.int64))
    link: NDArray[np.int32] = field(default_factory=lambda: np.empty(BATCH_RECORDS, np.int32))


class Walker(Protocol):
    """Walks records; ``limit`` bounds the bytes that one record can take."""

    limit: int
    header: int         # bytes before the first record

    def walk(self, b: NDArray[np.uint8], at: int, end: int, stop: int, out: Records) -> tuple[int, int, int]: ...

    def reason(self, b: NDArray[np.uint8], at: int, end: int) -> str: ...

    def find(self, b: NDArray[np.uint8], at: int, end: int, final: bool, near: int) -> tuple[int, bool]: ...

    def finish(self, account: Account) -> None: ...


class PcapWalker:
    """Classic pcap. Source: draft-ietf-opsawg-pcap."""

    def __init__(self, head: bytes, account: Account) -> None:
        self.big, self.unit = PCAP_MAGICS[head[:4]]
        order = ">" if self.big else "<"
        snap, link = struct.unpack(order + "II", head[16:24])
        self.link = link & 0xFFFF           # the upper bits tell of the frame check sequence
        self.limit = max(LEAST_LIMIT, min(snap, LARGEST_LIMIT))
        self.header = 24
        resolution = "ns" if self.unit == 1 else "us"
        account.format = f"pcap, {'big' if self.big else 'little'} endian, {resolution}"
        account.resolution, account.snap_length = resolution, snap

    def walk(self, b: NDArray[np.uint8], at: int, end: int, stop: int, out: Records) -> tuple[int, int, int]:
        n, at, status = walk.walk(b, at, end, stop, self.big, self.unit, self.limit, out.start, out.held, out.size,
                                  out.time)
        out.link[:n] = self.link
        return n, at, status

    def reason(self, b: NDArray[np.uint8], at: int, end: int) -> str:
        if at + walk.HEADER > end:
            return "cut record header"
        fraction, captured, wire = (walk.u32(b, at + k, self.big) for k in (4, 8, 12))
        if captured > self.limit:
            return f"record length {captured}"
        if captured > wire:
            return f"record length {captured} of a packet of {wire}"
        if fraction >= 1_000_000_000 // self.unit:
            return f"fraction of a second {fraction}"
        return "cut record"

    def find(self, b: NDArray[np.uint8], at: int, end: int, final: bool, near: int) -> tuple[int, bool]:
        return walk.find_record(b, at, end, final, self.big, self.unit, self.limit, near)

    def finish(self, account: Account) -> None:
        account.drops = None


class PcapngWalker:
    """pcapng. Source: draft-ietf-opsawg-pcapng."""

    def __init__(self, head: bytes, account: Account) -> None:
        section = section_of(head)
        assert section is not None
        self.section = section
        self.limit = pcapng.LARGEST_BLOCK
        self.header = 0
        self.dropped: list[int] = []
        self.packet_drops = np.zeros(2, np.int64)
        self.sections = self.interfaces = 0
        self.resolutions: set[int] = set()
        self.last = 0
        account.format = f"pcapng, {'big' if section.big else 'little'} endian"
        self._bad = ""

    def walk(self, b: NDArray[np.uint8], at: int, end: int, stop: int, out: Records) -> tuple[int, int, int]:
        done = 0
        self._bad = ""
        while True:
            s = self.section
            n, at, status = pcapng.walk_blocks(
                b, at, end, s.big, s.interfaces, len(s.interfaces), out.start[done:], out.held[done:],
                out.size[done:], out.time[done:], out.link[done:], self.last, self.packet_drops)
            done += n
            if done:
                self.last = int(out.time[done - 1])
            if status != pcapng.OTHER:
                return done, at, status
            head = bytes(b[at : at + 12])
            fresh = section_of(head)
            big = fresh.big if fresh else s.big
            total = int(walk.u32(b, at + 4, big))
            if total < 12 or total % 4 or total > pcapng.LARGEST_BLOCK:
                self._bad = f"block length {total}"
                return done, at, pcapng.DAMAGED
            if at + total > end:
                return done, at, pcapng.MORE
            if walk.u32(b, at + total - 4, big) != total:
                self._bad = f"block length {total} not repeated at the end of the block"
                return done, at, pcapng.DAMAGED
            if fresh:
                self._end_section()
                self.section = fresh
                self.sections += 1
            elif head[:4] == b"\x0a\x0d\x0d\x0a":
                self._bad = "section header without byte-order magic"
                return done, at, pcapng.DAMAGED
            else:
                self._bad = s.block(bytes(b[at : at + total]))
                if self._bad:
                    return done, at, pcapng.DAMAGED
                if len(s.interfaces):
                    self.resolutions.add(int(s.interfaces[-1, 1]))
            at += total

    def _end_section(self) -> None:
        self.dropped += self.section.dropped.values()
        self.interfaces += len(self.section.interfaces)

    def reason(self, b: NDArray[np.uint8], at: int, end: int) -> str:
        if self._bad:
            return self._bad
        if at + 12 > end:
            return "cut block header"
        total = int(walk.u32(b, at + 4, self.section.big))
        if at + total > end:
            return f"block length {total} past the end"
        return "malformed packet block"

    def find(self, b: NDArray[np.uint8], at: int, end: int, final: bool, near: int) -> tuple[int, bool]:
        return pcapng.find_block(b, at, end, final, self.section.big)

    def finish(self, account: Account) -> None:
        self._end_section()
        told = bool(self.dropped) or self.packet_drops[1] > 0
        account.drops = int(max(sum(self.dropped), int(self.packet_drops[0]))) if told else None
        names = [SCALES.get(r, f"2^-{r & 127} s" if r & 128 else f"10^-{r} s") for r in sorted(self.resolutions)]
        account.resolution = ", ".join(names)
        account.format += f", {self.sections} section{'s' * (self.sections != 1)}, " \
                          f"{self.interfaces} interface{'s' * (self.interfaces != 1)}, {account.resolution}"
