"""Read the records of a capture block by block, past damage, in bounded memory."""

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pcaptool.capture.compression import Hash, Source, compression_of
from pcaptool.capture.datagrams import Account, Damage
from pcaptool.capture.pcapng import section_of
from pcaptool.capture.walk import DAMAGED, MORE
from pcaptool.capture.walkers import PCAP_HEADER, PCAP_MAGICS, PcapngWalker, PcapWalker, Records, Walker
from pcaptool.problem import CaptureError, Problem

BLOCK = 8 << 20             # bytes read at a time
WHOLE_FILE = 1 << 62
PCAPNG_MAGIC = b"\x0a\x0d\x0d\x0a"


@dataclass(frozen=True, slots=True)
class Piece:
    """A stretch of a capture that can be read on its own: records that begin in [start, stop)."""

    path: Path
    start: int = 0          # byte offset; 0: from the file header on
    stop: int = WHOLE_FILE
    first_packet: int = 0
    least_time: int | None = None   # ns, of all its records; None: not looked at


@dataclass(slots=True)
class Block:
    """Records that lie in a buffer, as ``Records`` says; what is behind ``end`` may be written over."""

    buffer: NDArray[np.uint8]
    end: int                # of the bytes of the file in the buffer
    base: int               # offset of the buffer's first byte in the (uncompressed) file
    count: int              # records


def open_capture(path: Path, account: Account, start: int = 0, hash: Hash | None = None
                 ) -> tuple[Source, Walker, bytes]:
    """Return (stream, walker, first bytes of the stream, read already) of a capture.

    The stream goes on behind the file header, or at ``start`` when that is not 0; ``hash`` takes in
    what is read. Raises CaptureError when the file is no capture.
    """
    source = Source(path, hash=hash)
    account.compression = source.compression
    head = bytearray(PCAP_HEADER)
    n = source.read_into(memoryview(head))
    found = bytes(head[:n])
    walker: Walker
    if n == PCAP_HEADER and found[:4] in PCAP_MAGICS:
        walker = PcapWalker(found, account)
    elif section_of(found):
        walker = PcapngWalker(found, account)
    else:
        source.close()
        raise CaptureError(_no_capture(path, source, found))
    if start:
        source.close()
        return Source(path, start), walker, b""
    return source, walker, b"" if walker.header else found


def _no_capture(path: Path, source: Source, head: bytes) -> Problem:
    within = f" in a {source.compression} stream" if source.compression else ""
    if source.broken:
        return Problem(file=str(path), place=f"offset {len(head)}", found=source.broken, expected="a whole stream",
                       fix="copy the file again from its origin")
    if not head:
        return Problem(file=str(path), place="", found=f"nothing{within}" if within else "an empty file",
                       expected="a pcap or pcapng capture",
                       fix="check that the capture program wrote and closed its file")
    nested = compression_of(head)
    if source.compression and nested:
        return Problem(file=str(path), place="", found=f"{nested} inside {source.compression}",
                       expected="one compression", fix=f"decompress the file once with {source.compression}")
    if head[:4] in PCAP_MAGICS:
        return Problem(file=str(path), place=f"offset {len(head)}", found="the end of the file in its header" + within,
                       expected=f"a pcap header of {PCAP_HEADER} bytes and records behind it",
                       fix="copy the file again from its origin")
    if head[:4] == PCAPNG_MAGIC:
        return Problem(file=str(path), place="offset 8", found=f"byte-order magic {head[8:12].hex(' ') or 'missing'}",
                       expected="1a 2b 3c 4d or 4d 3c 2b 1a", fix="copy the file again from its origin")
    return Problem(file=str(path), place="offset 0", found=f"first bytes {head[:4].hex(' ')}{within}",
                   expected="pcap (a1 b2 c3 d4 or a1 b2 3c 4d, either byte order) or pcapng (0a 0d 0d 0a)",
                   fix="leave the file out, or export it as pcap or pcapng")


def read_records(piece: Piece, account: Account, records: Records, block: int = BLOCK, hash: Hash | None = None
                 ) -> Iterator[Block]:
    """Yield the records of a piece, block by block; ``records`` is filled anew for each.

    Damage is noted in the account with byte offsets and passed over; every byte of the piece is one
    of ``record_bytes``, ``other_bytes`` or ``damaged_bytes``. Raises CaptureError.
    """
    source, walker, head = open_capture(piece.path, account, piece.start, hash)
    try:
        yield from _Reading(source, walker, head, piece, account, block).blocks(records)
        walker.finish(account)
        source.drain()
    finally:
        source.close()


class _Reading:
    """A buffer that moves along a stream: bytes ``at`` to ``end`` of it are still to be walked."""

    def __init__(self, source: Source, walker: Walker, head: bytes, piece: Piece, account: Account,
                 block: int) -> None:
        self.source, self.walker, self.piece, self.account, self.block = source, walker, piece, account, block
        self.buffer = np.empty(2 * block, np.uint8)
        self.buffer[: len(head)] = np.frombuffer(head, np.uint8)
        self.base = piece.start or (walker.header if not head else 0)
        self.at, self.end, self.final = 0, len(head), False
        self.near = -1              # time of the latest record
        account.size = account.other_bytes = 0 if piece.start else self.base

    def blocks(self, records: Records) -> Iterator[Block]:
        account, walker = self.account, self.walker
        while True:
            if not self.final and self.end - self.at < self.block:
                self.refill()
            before, other = self.at, walker.other_bytes
            stop = min(self.piece.stop - self.base, self.end if self.final else WHOLE_FILE)
            n, self.at, status = walker.walk(self.buffer, self.at, self.end, stop, self.final, self.near,
                                                   records)
            walked, other = self.at - before, walker.other_bytes - other
            account.size += walked
            account.other_bytes += other
            account.record_bytes += walked - other
            if n:
                self.near = int(records.time[n - 1])
                yield Block(self.buffer, self.end, self.base, n)
            if self.base + self.at >= self.piece.stop or (self.final and self.at >= self.end):
                break
            if status == DAMAGED or (status == MORE and self.final):
                self.pass_over(walker.reason(self.buffer, self.at, self.end))
            elif status == MORE:
                self.refill()
        if self.source.broken and not (account.damage and account.damage[-1].reason == self.source.broken):
            account.damage.append(Damage(self.base + self.at, 0, self.source.broken))

    def refill(self) -> None:
        """Move what is still to be walked to the front and read on; a larger buffer when that is full."""
        rest = self.end - self.at
        if rest == len(self.buffer):
            self.buffer = np.concatenate([self.buffer, np.empty(rest, np.uint8)])
        self.buffer[:rest] = self.buffer[self.at : self.end].copy()
        room = min(self.block, len(self.buffer) - rest)
        n = self.source.read_into(self.buffer[rest : rest + room].data)
        self.base, self.at, self.end, self.final = self.base + self.at, 0, rest + n, n < room

    def pass_over(self, reason: str) -> None:
        """Go to the next believable record, or to the end; note the damage."""
        start = self.base + self.at
        if self.final and self.source.broken and reason.startswith("cut "):
            reason = self.source.broken
        self.at += 1
        while True:
            self.at, found = self.walker.find(self.buffer, self.at, self.end, self.final, self.near)
            if found or self.final:
                break
            self.refill()
        skipped = self.base + self.at - start
        self.account.damage.append(Damage(start, skipped, reason))
        self.account.damaged_bytes += skipped
        self.account.size += skipped
