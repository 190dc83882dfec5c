"""Put IP fragments together again: RFC 791, 3.2, and RFC 8200, 4.5.

Where fragments overlap, the bytes that came first stay. A datagram that is not whole after 30
seconds is given up. So a piece of a capture can finish by itself only what nothing before it can
have a part in: a fragment within 30 seconds of the piece's begin, or of such a fragment of the same
datagram, is handed over, to be joined with those of the other pieces. The result is then the same
however a capture is cut.
"""

import struct
from dataclasses import dataclass, field

from pcaptool.capture.datagrams import OpenFragment

TIME_OUT = 30_000_000_000       # ns
JITTER = 1_000_000_000          # ns by which time stamps may run backwards without a clock step
MOST_BYTES = 64 << 20           # held in open datagrams, then the oldest are given up
MOST_HANDED = 4 << 20           # payload bytes; of a flood, only what can go on from before is handed over
OVERHEAD = 512                  # bytes of memory that a fragment takes beside its payload
LARGEST = 65_515                # payload of the largest IPv4 packet
Key = tuple[int, bytes, bytes, int]


@dataclass(slots=True)
class Whole:
    """A datagram that is whole, as one IP packet, and its fragments in the order they came.

    A packet that is empty: the fragments reach beyond the largest packet there is.
    """

    packet: bytes
    fragments: list[OpenFragment]


@dataclass(slots=True)
class _Open:
    first_order: int
    fragments: list[OpenFragment] = field(default_factory=list)
    covered: list[tuple[int, int]] = field(default_factory=list)    # stretches that came, apart, ascending
    size: int = -1              # of the whole payload, once the last fragment came


class Reassembly:
    """Datagrams of which some fragments came.

    begin     order of the piece's first record; None when nothing can come from before
    given_up  fragments of datagrams that timed out; the caller takes them away
    handed    fragments for whoever joins the pieces
    """

    def __init__(self, begin: int | None = None) -> None:
        self.begin = begin
        self.given_up: list[OpenFragment] = []
        self.handed: list[OpenFragment] = []
        self._handed_bytes = self._open_bytes = 0
        self._unsure: dict[tuple[Key, int], int] = {}       # key -> order of its latest fragment handed over
        self._open: dict[tuple[Key, int], _Open] = {}

    def add(self, fragment: OpenFragment) -> Whole | None:
        """Take a fragment in; return its datagram when that is whole now."""
        key = fragment.key, fragment.protocol if fragment.key[0] == 4 else 0
        since = self._unsure.get(key, self.begin if self._handed_bytes < MOST_HANDED else None)
        if since is not None and fragment.order - since <= TIME_OUT + JITTER:
            self._unsure[key] = max(since, fragment.order)
            self._handed_bytes += len(fragment.payload) + OVERHEAD
            self.handed.append(fragment)
            return None
        entry = self._open.get(key)
        if entry and abs(fragment.order - entry.first_order) > TIME_OUT:
            self._give_up(key)
            entry = None
        if entry is None:
            entry = self._open[key] = _Open(fragment.order)
        entry.fragments.append(fragment)
        self._open_bytes += len(fragment.payload) + OVERHEAD
        end = fragment.offset + len(fragment.payload)
        if not fragment.more and entry.size < 0:
            entry.size = end
        entry.covered = _with(entry.covered, fragment.offset, end)
        if entry.size >= 0 and entry.covered[0][0] == 0 and entry.covered[0][1] >= entry.size:
            self._forget(key)
            return Whole(_packet(entry), entry.fragments)
        while self._open_bytes > MOST_BYTES:
            self._give_up(next(iter(self._open)))
        return None

    def expire(self, order: int) -> None:
        """Give up what has timed out when records of this order come."""
        late = [k for k, entry in self._open.items() if order - entry.first_order > TIME_OUT + JITTER]
        for key in late:
            self._give_up(key)

    def left(self) -> list[OpenFragment]:
        """Return the fragments handed over and of all datagrams still open, in the order they came."""
        every = [f for entry in self._open.values() for f in entry.fragments]
        return sorted([*every, *self.handed], key=lambda f: (f.order, f.packet))

    def _give_up(self, key: tuple[Key, int]) -> None:
        self.given_up += self._forget(key).fragments

    def _forget(self, key: tuple[Key, int]) -> _Open:
        entry = self._open.pop(key)
        self._open_bytes -= sum(len(f.payload) + OVERHEAD for f in entry.fragments)
        return entry


def _with(covered: list[tuple[int, int]], begin: int, end: int) -> list[tuple[int, int]]:
    """Return the stretches with one more, those that touch it merged."""
    touching = [s for s in covered if s[0] <= end and s[1] >= begin]
    apart = [s for s in covered if s[0] > end or s[1] < begin]
    merged = min([begin, *(s[0] for s in touching)]), max([end, *(s[1] for s in touching)])
    return sorted([*apart, merged])


def _packet(entry: _Open) -> bytes:
    """Return the whole as an IP packet of its own, without a fragment header."""
    if entry.size > LARGEST:
        return b""
    payload = bytearray(entry.size)
    for f in reversed(entry.fragments):         # so that what came first is written last
        part = f.payload[: max(entry.size - f.offset, 0)]
        payload[f.offset : f.offset + len(part)] = part
    version, source, destination, ident = entry.fragments[0].key
    protocol = min(entry.fragments, key=lambda f: f.offset).protocol
    if version == 4:
        header = struct.pack(">BxHHxxBBxx", 0x45, 20 + entry.size, ident, 64, protocol)
    else:
        header = struct.pack(">B3xHBB", 0x60, entry.size, protocol, 64)
    return header + source + destination + bytes(payload)


def read_fragment(data: bytes, ip: int, at: int, stop: int, packet: int, time: int, order: int) -> OpenFragment:
    """Return the fragment in an IP packet.

    data         octets held; all of the packet is there
    ip, at, stop places in data: the IP header, what is behind the headers that are not fragmented
                 (IPv6: the fragment header), the end
    """
    if data[ip] >> 4 == 4:
        ident, field_ = struct.unpack_from(">HH", data, ip + 4)
        key = 4, data[ip + 12 : ip + 16], data[ip + 16 : ip + 20], ident
        return OpenFragment(packet, time, order, key, (field_ & 0x1FFF) * 8, bool(field_ & 0x2000), data[at:stop],
                            data[ip + 9])
    protocol, _, field_, ident = struct.unpack_from(">BBHI", data, at)
    key = 6, data[ip + 8 : ip + 24], data[ip + 24 : ip + 40], ident
    return OpenFragment(packet, time, order, key, field_ >> 3 << 3, bool(field_ & 1), data[at + 8 : stop], protocol)
