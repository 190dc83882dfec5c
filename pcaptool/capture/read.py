"""Captures to datagrams: read, walk, classify, reassemble, account."""

from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pcaptool.capture import headers
from pcaptool.capture.compression import Source, compression_of
from pcaptool.capture.datagrams import ENTRIES, Account, Damage, Datagrams, OpenFragment
from pcaptool.capture.fragments import Reassembly, Whole
from pcaptool.capture.pcapng import section_of
from pcaptool.capture.slow import FragmentFound, UdpFound, ipv4_fragment, ipv6_fragment, take_apart
from pcaptool.capture.walk import DAMAGED, MORE
from pcaptool.capture.walkers import PCAP_MAGICS, PcapngWalker, PcapWalker, Records, Walker
from pcaptool.problem import CaptureError, Problem

BLOCK = 2 << 20             # bytes read at a time
STEP_BACK = 1_000_000_000   # ns by which a clock must go back to be noted
WHOLE_FILE = 1 << 62


@dataclass(frozen=True, slots=True)
class Piece:
    """A stretch of a capture that can be read on its own: records that begin in [start, stop)."""

    path: Path
    start: int = 0          # byte offset; 0: from the file header on
    stop: int = WHOLE_FILE
    first_packet: int = 0


def open_capture(path: Path, account: Account, start: int = 0) -> tuple[Source, Walker, bytes]:
    """Return (stream behind the file header, walker, bytes read already) of a capture.

    Raises CaptureError when the file is no capture.
    """
    source = Source(path)
    account.compression = source.compression
    head = bytearray(24)
    n = source.read_into(memoryview(head))
    found = bytes(head[:n])
    walker: Walker | None = None
    if n == 24 and found[:4] in PCAP_MAGICS:
        walker = PcapWalker(found, account)
    elif section_of(found):
        walker = PcapngWalker(found, account)
    if walker is None:
        source.close()
        raise CaptureError(_no_capture(path, source, found))
    if start:
        source.close()
        return Source(path, start), walker, b""
    return source, walker, b"" if walker.header else found


def _no_capture(path: Path, source: Source, head: bytes) -> Problem:
    if source.broken:
        return Problem(file=str(path), place="offset 0", found=source.broken, expected="a whole stream",
                       fix="copy the file again from its origin")
    if not head:
        what = f"nothing in a {source.compression} stream" if source.compression else "an empty file"
        return Problem(file=str(path), place="", found=what, expected="a pcap or pcapng capture",
                       fix="check that the capture program wrote and closed its file")
    nested = compression_of(head)
    if source.compression and nested:
        return Problem(file=str(path), place="", found=f"{nested} inside {source.compression}",
                       expected="one compression", fix=f"decompress the file once with {source.compression}")
    return Problem(file=str(path), place="offset 0", found=f"first bytes {head[:4].hex(' ')}",
                   expected="pcap (a1b2c3d4 or a1b23c4d, either byte order) or pcapng (0a0d0d0a)",
                   fix="leave the file out, or export it as pcap or pcapng")


class DatagramReader:
    """Iterates over the UDP datagrams of a capture, or a piece of one, in bounded batches.

    ``account`` is complete after the last batch.
    """

    def __init__(self, what: Piece | Path | str) -> None:
        self.piece = what if isinstance(what, Piece) else Piece(Path(what))
        self.account = Account()
        self._packet = self.piece.first_packet
        self._last_time: int | None = None
        self.begin_time: int | None = None      # ns, of the first record
        self._reassembly = Reassembly()
        self._reasons: Counter[str] = Counter()
        self._links: Counter[int] = Counter()
        self._entries = np.zeros(len(ENTRIES), np.int64)

    @property
    def end_time(self) -> int | None:
        """Time of the last record read, ns."""
        return self._last_time

    def __iter__(self) -> Iterator[Datagrams]:
        records = Records()
        for buffer, _, n in read_records(self.piece, self.account, records):
            yield self._batch(buffer, n, records)
        self._finish()

    def _finish(self) -> None:
        account = self.account
        given_up = self._reassembly.given_up
        self._entries[ENTRIES.index("fragment_incomplete")] += len(given_up)
        account.open_fragments = list(self._reassembly.left())
        for name, count in zip(ENTRIES, self._entries, strict=True):
            account.entries[name] += int(count)
        account.reasons = dict(sorted(self._reasons.items()))
        account.link_types = dict(sorted(self._links.items()))

    def _batch(self, b: NDArray[np.uint8], n: int, r: Records) -> Datagrams:
        start, held, size, link, time = r.start[:n], r.held[:n], r.size[:n], r.link[:n], r.time[:n]
        account = self.account
        account.records += n
        order = self._order(time)
        if n:
            low, high = int(time.min()), int(time.max())
            account.first_time = low if account.first_time is None else min(account.first_time, low)
            account.last_time = high if account.last_time is None else max(account.last_time, high)
        for kind in np.unique(link):
            self._links[int(kind)] += int((link == kind).sum())
        verdict, reason = np.empty(n, np.int8), np.empty(n, np.int8)
        row, payload = np.empty(n, np.int64), np.empty(n, np.int64)
        payload_held, payload_size = np.empty(n, np.int32), np.empty(n, np.int32)
        ports, checksum = np.empty((n, 2), np.uint16), np.empty(n, np.uint16)
        source, destination = np.empty((n, 2), np.uint64), np.empty((n, 2), np.uint64)
        version, ident = np.empty(n, np.uint8), np.empty(n, np.int32)
        rows = headers.classify(b, start, held, size, link, verdict, reason, row, payload, payload_held, payload_size,
                                ports, source, destination, version, ident, checksum)
        counted = np.bincount(verdict[verdict >= 0], minlength=len(ENTRIES))
        self._entries += counted
        for code in np.unique(reason[reason > 0]):
            hits = np.flatnonzero(reason == code)
            if code == headers.LINK_TYPE:
                for kind in np.unique(link[hits]):
                    self._reasons[f"link type {kind}"] += int((link[hits] == kind).sum())
            else:
                self._reasons[headers.REASONS[code]] += len(hits)
        row = row[:rows]
        packet = self._packet + row
        fast = Datagrams(b, packet, np.ones(rows, np.int32), time[row], order[row], payload[:rows],
                         payload_held[:rows], payload_size[:rows], ports[:rows, 0], ports[:rows, 1], source[:rows],
                         destination[:rows], version[:rows], ident[:rows], checksum[:rows])
        slow = np.flatnonzero((verdict == headers.SLOW) | (verdict == headers.FRAGMENT))
        extra = [d for i in slow if (d := self._slow(b, int(i), r, int(verdict[i]), int(order[i])))]
        self._packet += n
        return _with_extra(fast, extra) if extra else fast

    def _order(self, time: NDArray[np.int64]) -> NDArray[np.int64]:
        """Return times made monotone over backward clock steps; note the steps."""
        if not len(time):
            return time.copy()
        if self.begin_time is None:
            self.begin_time = int(time[0])
        before = np.concatenate([[time[0] if self._last_time is None else self._last_time], time[:-1]])
        back = before - time
        steps = np.flatnonzero(back > STEP_BACK)
        for i in steps:
            self.account.steps.append((self._packet + int(i), int(before[i]), int(time[i])))
        shift = np.full(len(time), self.account.order_shift, np.int64)
        if len(steps):
            added = np.zeros(len(time), np.int64)
            added[steps] = back[steps]
            shift += np.cumsum(added)
        self.account.order_shift = int(shift[-1])
        self._last_time = int(time[-1])
        return time + shift

    def _slow(self, b: NDArray[np.uint8], i: int, r: Records, verdict: int, order: int) -> "_Extra | None":
        """Return the datagram that a record completes, if any; account for the record otherwise."""
        first, end = int(r.start[i]), int(r.start[i] + r.held[i])
        packet, time = self._packet + i, int(r.time[i])
        data = bytes(b[first:end])
        reason = ""
        if verdict == headers.FRAGMENT:
            kind, ip = headers.network(b, first, end, int(r.link[i]))
            read = ipv4_fragment if kind == 0x0800 else ipv6_fragment
            try:
                found: UdpFound | FragmentFound | str | None = read(data, ip - first, len(data))
            except (IndexError, ValueError):
                found = None
            if found is None:
                found, reason = "unreadable", "fragment header"
        else:
            found, reason = take_apart(data, int(r.size[i]), int(r.link[i]))
        if isinstance(found, FragmentFound) and not found.whole:
            found = "cut" if r.held[i] < r.size[i] else "unreadable"
            reason = "" if found == "cut" else "fragment length"
        if isinstance(found, str):
            self._entries[ENTRIES.index(found)] += 1
            if reason:
                self._reasons[reason] += 1
            return None
        if isinstance(found, UdpFound):
            return _Extra(packet, 1, time, order, found)
        key = (4 if len(found.source) == 4 else 6, found.source + bytes([found.protocol]), found.destination,
               found.ident)
        whole = self._reassembly.add(OpenFragment(packet, time, order, key, found.offset, found.more, found.payload))
        if whole is None:
            return None
        entry, extra = _datagram_of(whole)
        if extra is None:
            self._entries[ENTRIES.index(entry)] += len(whole.fragments)
            if entry == "unreadable":
                self._reasons["UDP length"] += len(whole.fragments)
        return extra


@dataclass(slots=True)
class _Extra:
    packet: int
    records: int
    time: int
    order: int
    found: UdpFound


def _datagram_of(whole: Whole) -> tuple[str, _Extra | None]:
    """Return (ledger entry, datagram or None) of a reassembled IP payload."""
    _, source, destination, ident = whole.key
    data, last = whole.payload, whole.fragments[-1]
    if source[-1] != 17:
        return "other_ip", None
    length = int.from_bytes(data[4:6], "big")
    if len(data) < 8 or not 8 <= length <= len(data):
        return "unreadable", None
    number = ident if len(destination) == 4 else -1
    found = UdpFound(source[:-1], destination, number, int.from_bytes(data[:2], "big"),
                     int.from_bytes(data[2:4], "big"), int.from_bytes(data[6:8], "big"), length - 8, data[8:length])
    return "other_udp", _Extra(last.packet, len(whole.fragments), last.time, last.order, found)


def _with_extra(fast: Datagrams, extra: Sequence[_Extra]) -> Datagrams:
    """Return the batch with datagrams of the slow path put in, in order of packets."""
    payloads = [np.frombuffer(e.found.payload, np.uint8) for e in extra]
    sizes = np.array([len(p) for p in payloads], np.int64)
    begin = len(fast.buffer) + np.cumsum(sizes) - sizes
    address = [[_halves(a) for a in (e.found.source, e.found.destination)] for e in extra]
    founds = [e.found for e in extra]
    columns: dict[str, list[int] | NDArray[np.int64] | list[list[int]]] = {
        "packet": [e.packet for e in extra], "records": [e.records for e in extra],
        "time": [e.time for e in extra], "order": [e.order for e in extra], "start": begin,
        "held": sizes, "size": [f.size for f in founds], "source_port": [f.source_port for f in founds],
        "destination_port": [f.destination_port for f in founds],
        "source": [a[0] for a in address], "destination": [a[1] for a in address],
        "version": [4 if len(f.source) == 4 else 6 for f in founds], "ident": [f.ident for f in founds],
        "checksum": [f.checksum for f in founds],
    }
    joined = {
        name: np.concatenate([getattr(fast, name), np.array(values, getattr(fast, name).dtype)])
        for name, values in columns.items()
    }
    by_packet = np.argsort(joined["packet"], kind="stable")
    buffer = np.concatenate([fast.buffer, *payloads])
    return Datagrams(buffer, **{name: values[by_packet] for name, values in joined.items()})


def _halves(address: bytes) -> list[int]:
    value = int.from_bytes(address, "big")
    return [value >> 64, value & (2**64 - 1)]


def read_records(
    piece: Piece, account: Account, records: Records
) -> Iterator[tuple[NDArray[np.uint8], int, int]]:
    """Yield (buffer, its file offset, number of records) batch by batch; ``records`` says where they lie.

    Damage is noted in the account with byte offsets and passed over; every byte of the piece is a
    file header, a record or damaged.
    """
    source, walker, head = open_capture(piece.path, account, piece.start)
    buffer = np.empty(2 * BLOCK, np.uint8)
    buffer[: len(head)] = np.frombuffer(head, np.uint8)
    base = piece.start or (walker.header if not head else 0)        # file offset of buffer[0]
    at, end, final = 0, len(head), False
    lost_from, lost_reason, near = -1, "", -1
    try:
        while True:
            if not final and end - at < BLOCK:
                buffer, at, end, base, final = _refill(source, buffer, at, end, base)
            if lost_from >= 0:
                at, found = walker.find(buffer, at, end, final, near)
                if not found and not final:
                    if end - at >= len(buffer) - 1:
                        buffer = np.concatenate([buffer, np.empty(len(buffer), np.uint8)])
                    buffer, at, end, base, final = _refill(source, buffer, at, end, base)
                    continue
                account.damage.append(Damage(lost_from, base + at - lost_from, lost_reason))
                account.damaged_bytes += base + at - lost_from
                lost_from = -1
                if not found:
                    break
            n, at, status = walker.walk(buffer, at, end, min(piece.stop - base, end if final else 1 << 62), records)
            if n:
                near = int(records.time[n - 1])
                yield buffer[:end], base, n
            if status == DAMAGED:
                lost_from, lost_reason = base + at, walker.reason(buffer, at, end)
                at += 1
            elif base + at >= piece.stop or (final and at >= end):
                break
            elif status == MORE and final:
                lost_from, lost_reason = base + at, source.broken or walker.reason(buffer, at, end)
                at += 1
            elif status == MORE:
                if at == 0 and end >= len(buffer):
                    buffer = np.concatenate([buffer, np.empty(len(buffer), np.uint8)])
                buffer, at, end, base, final = _refill(source, buffer, at, end, base)
        if source.broken and not account.damage:
            account.damage.append(Damage(base + end, 0, source.broken))
        walker.finish(account)
    finally:
        source.close()


def _refill(source: Source, buffer: NDArray[np.uint8], at: int, end: int, base: int
            ) -> tuple[NDArray[np.uint8], int, int, int, bool]:
    """Move the rest to the front and read on; return (buffer, at, end, base, whether the file ended)."""
    rest = end - at
    buffer[:rest] = buffer[at:end].copy()
    room = min(BLOCK, len(buffer) - rest)
    n = source.read_into(memoryview(buffer)[rest : rest + room])
    return buffer, 0, rest + n, base + at, n < room


def read_datagrams(what: Piece | Path | str) -> DatagramReader:
    """Return the UDP datagrams of a capture, batch by batch; see DatagramReader and Datagrams.

    Raises CaptureError on iteration when the file is no capture.
    """
    return DatagramReader(what)


def join_fragments(fragments: Sequence[OpenFragment]) -> tuple[Datagrams, dict[str, list[OpenFragment]]]:
    """Reassemble fragments left open at the ends of pieces, in canonical order.

    Returns (datagrams, fragments by ledger entry); those of a datagram stand under ``frames`` until
    a profile has or has not claimed it.
    """
    reassembly = Reassembly()
    entries: dict[str, list[OpenFragment]] = {"frames": [], "other_ip": [], "unreadable": []}
    extra = []
    for fragment in fragments:
        whole = reassembly.add(fragment)
        if whole is None:
            continue
        entry, datagram = _datagram_of(whole)
        entries["frames" if datagram else entry] += whole.fragments
        if datagram:
            extra.append(datagram)
    entries["fragment_incomplete"] = [*reassembly.given_up, *reassembly.left()]
    return _with_extra(_no_datagrams(), extra) if extra else _no_datagrams(), entries


def _no_datagrams() -> Datagrams:
    def none(kind: str) -> NDArray[np.generic]:
        return np.zeros((0, 2) if kind == "pair" else 0, np.uint64 if kind == "pair" else kind)

    kinds = ("u1", "i8", "i4", "i8", "i8", "i8", "i4", "i4", "u2", "u2", "pair", "pair", "u1", "i4", "u2")
    return Datagrams(*(none(kind) for kind in kinds))  # type: ignore[arg-type]
