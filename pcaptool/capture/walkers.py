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
PCAP_HEADER = 24
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
    """Walks the records of one file.

    header       bytes before the first record
    other_bytes  bytes walked so far that belong to no record, ``header`` not among them
    """

    header: int
    other_bytes: int

    def walk(self, b: NDArray[np.uint8], at: int, end: int, stop: int, final: bool, near: int, out: Records
             ) -> tuple[int, int, int]:
        """Return (records, where the next begins, MORE | DAMAGED | FULL); fill ``out``; see walk.walk."""

    def reason(self, b: NDArray[np.uint8], at: int, end: int) -> str:
        """Return what is wrong at the place where ``walk`` stopped."""

    def find(self, b: NDArray[np.uint8], at: int, end: int, final: bool, near: int) -> tuple[int, bool]:
        """Return (place, found) of the next believable record; see walk.find_record."""

    def finish(self, account: Account) -> None:
        """Enter what the whole file told."""


class PcapWalker:
    """Classic pcap. Source: draft-ietf-opsawg-pcap."""

    def __init__(self, head: bytes, account: Account) -> None:
        self.big, self.unit = PCAP_MAGICS[head[:4]]
        snap, link = struct.unpack((">" if self.big else "<") + "II", head[16:PCAP_HEADER])
        self.link = link & 0xFFFF           # the upper bits tell of the frame check sequence
        self.limit = max(LEAST_LIMIT, min(snap, LARGEST_LIMIT))
        self.header, self.other_bytes = PCAP_HEADER, 0
        resolution = "ns" if self.unit == 1 else "us"
        account.format = f"pcap, {'big' if self.big else 'little'} endian, {resolution}"
        account.resolution, account.snap_length = resolution, snap

    def walk(self, b: NDArray[np.uint8], at: int, end: int, stop: int, final: bool, near: int, out: Records
             ) -> tuple[int, int, int]:
        n, at, status = walk.walk(b, at, end, stop, final, self.big, self.unit, self.limit, near, out.start,
                                  out.held, out.size, out.time)
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
        if not wire:
            return "record of a packet without octets"
        if wire > walk.LARGEST_TIMES * self.limit:
            return f"record of a packet of {wire}"
        if fraction * self.unit >= walk.SECOND:
            return f"fraction of a second {fraction}"
        return "cut record" if at + walk.HEADER + captured > end else "time far from the record before"

    def find(self, b: NDArray[np.uint8], at: int, end: int, final: bool, near: int) -> tuple[int, bool]:
        return walk.find_record(b, at, end, final, self.big, self.unit, self.limit, near)

    def finish(self, account: Account) -> None:
        account.drops = None                # the format has no place to tell


class PcapngWalker:
    """pcapng. Source: draft-ietf-opsawg-pcapng."""

    def __init__(self, head: bytes, account: Account) -> None:
        section = section_of(head)
        assert section is not None
        self.section = section
        self.header = self.other_bytes = 0
        self.dropped: list[int] = []
        self.packet_drops = np.zeros(2, np.int64)
        self.sections = self.interfaces = 0
        self.resolutions: set[int] = set()
        self.snap_length = 0
        self.last = 0
        account.format = f"pcapng, {'big' if section.big else 'little'} endian"
        self._bad = ""

    def walk(self, b: NDArray[np.uint8], at: int, end: int, stop: int, final: bool, near: int, out: Records
             ) -> tuple[int, int, int]:
        done = 0
        self._bad = ""
        while True:
            s = self.section
            n, at, status, passed = pcapng.walk_blocks(
                b, at, end, s.big, s.interfaces, s.count, out.start[done:], out.held[done:], out.size[done:],
                out.time[done:], out.link[done:], self.last, self.packet_drops)
            self.other_bytes += passed
            done += n
            if done:
                self.last = int(out.time[done - 1])
            if status != pcapng.OTHER:
                return done, at, status
            fresh = section_of(bytes(b[at : at + 12]))
            total = int(walk.u32(b, at + 4, fresh.big if fresh else s.big))
            if bytes(b[at : at + 4]) == b"\x0a\x0d\x0d\x0a":
                if not fresh:
                    self._bad = "section header without byte-order magic"
                elif total < 28 or total % 4 or total > pcapng.LARGEST_BLOCK:
                    self._bad = f"block length {total}"
                elif at + total > end:
                    return done, at, walk.MORE
                elif walk.u32(b, at + total - 4, fresh.big) != total:
                    self._bad = f"block length {total} not repeated at the end of the block"
                else:
                    self._end_section()
                    self.section = fresh
                    self.sections += 1
            else:
                self._bad = s.block(bytes(b[at : at + total]))
            if self._bad:
                return done, at, walk.DAMAGED
            self.other_bytes += total
            at += total

    def _end_section(self) -> None:
        s = self.section
        self.dropped += s.dropped.values()
        self.interfaces += s.count
        self.resolutions |= set(s.interfaces[: s.count, 1].tolist())
        self.snap_length = max([self.snap_length, *s.interfaces[: s.count, 3].tolist()])

    def reason(self, b: NDArray[np.uint8], at: int, end: int) -> str:
        if self._bad:
            return self._bad
        if at + 12 > end:
            return "cut block header"
        total = int(walk.u32(b, at + 4, self.section.big))
        if total < 12 or total % 4 or total > pcapng.LARGEST_BLOCK:
            return f"block length {total}"
        if at + total > end:
            return "cut block"
        if walk.u32(b, at + total - 4, self.section.big) != total:
            return f"block length {total} not repeated at the end of the block"
        return "malformed packet block"

    def find(self, b: NDArray[np.uint8], at: int, end: int, final: bool, near: int) -> tuple[int, bool]:
        return pcapng.find_block(b, at, end, final, self.section.big)

    def finish(self, account: Account) -> None:
        self._end_section()
        told = bool(self.dropped) or self.packet_drops[1] > 0
        account.drops = max(sum(self.dropped), int(self.packet_drops[0])) if told else None
        account.snap_length = self.snap_length
        names = [SCALES.get(r, f"2^-{r & 127} s" if r & 128 else f"10^-{r} s") for r in sorted(self.resolutions)]
        account.resolution = ", ".join(names)
        account.format += f", {self.sections} section{'s' * (self.sections != 1)}, " \
                          f"{self.interfaces} interface{'s' * (self.interfaces != 1)}, {account.resolution}"
