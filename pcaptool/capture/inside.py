"""Datagrams in packets that the array path listed as special: tunnels, 802.2, fragments.

Round by round, what lies inside is found, fragments are put together, and the packets that come to
light go through the array path again.
"""

from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from pcaptool.capture.datagrams import Datagrams, OpenFragment
from pcaptool.capture.fragments import Reassembly, read_fragment
from pcaptool.capture.headers import (
    CUT,
    FRAGMENT,
    NOT_IP,
    OTHER_IP,
    PROTOCOL,
    RAW,
    REASONS,
    SPECIAL,
    UDP_ROW,
    UNREADABLE,
    Headers,
    classify,
)
from pcaptool.capture.slow import CutShort, look_inside

DEEPEST = 8         # packets in packets


@dataclass(slots=True)
class Packet:
    """A packet to look into: in a record of its own, inside another, or put together of fragments."""

    packet: int                 # as in Datagrams
    time: int
    order: int
    start: int                  # place in the buffer, bytes held, bytes on the wire
    held: int
    size: int
    link: int
    records: int = 1
    in_ip: bool = False         # some IP packet is round it: then the record is IP, whatever is inside
    fragments: list[OpenFragment] = field(default_factory=list)


class Room:
    """A buffer whose bytes from ``end`` on are free; it is copied into a larger one when they are too few."""

    def __init__(self, buffer: NDArray[np.uint8], end: int) -> None:
        self.buffer, self.end = buffer, end

    def put(self, data: bytes) -> int:
        """Append data; return its place."""
        if self.end + len(data) > len(self.buffer):
            grown = np.empty(2 * (self.end + len(data)), np.uint8)
            grown[: self.end] = self.buffer[: self.end]
            self.buffer = grown
        place = self.end
        self.end += len(data)
        self.buffer[place : self.end] = np.frombuffer(data, np.uint8)
        return place


@dataclass(slots=True)
class Inside:
    """What came of special packets: datagrams, not yet in order, and the others with their entry.

    others  (packet, verdict, reason); the verdict is a position in ENTRIES
    """

    datagrams: list[Datagrams] = field(default_factory=list)
    others: list[tuple[Packet, int, str]] = field(default_factory=list)
    claimed: list[Packet] = field(default_factory=list)         # those that gave the datagrams


def look_into(packets: list[Packet], special: NDArray[np.int64], fragments: Iterable[OpenFragment],
              reassembly: Reassembly, room: Room) -> Inside:
    """Return the datagrams in special packets, and in those that fragments make whole.

    special    as in Headers, its first column a position in ``packets``
    fragments  come before those found in ``packets``
    """
    result = Inside()
    for _ in range(DEEPEST):
        found: list[Packet] = []
        fresh: list[OpenFragment] = []
        for i, kind, network, at, stop in special.tolist():
            outer = packets[i]
            data = room.buffer[outer.start : outer.start + outer.held].tobytes()
            places = network - outer.start, at - outer.start, stop - outer.start
            if kind == FRAGMENT and outer.records == 1:
                fresh.append(read_fragment(data, *places, outer.packet, outer.time, outer.order))
                continue
            if kind == FRAGMENT:
                result.others.append((outer, UNREADABLE, "fragment in a fragment"))
                continue
            inner = _inner(outer, data, kind, places[1], places[2])
            if isinstance(inner, Packet):
                found.append(inner)
            else:
                result.others.append((outer, *inner))
        for fragment in [*fragments, *sorted(fresh, key=lambda f: f.packet)]:
            whole = reassembly.add(fragment)
            if whole is None:
                continue
            packet = Packet(fragment.packet, fragment.time, fragment.order, 0, len(whole.packet), len(whole.packet),
                            RAW, len(whole.fragments), True, whole.fragments)
            if whole.packet:
                packet.start = room.put(whole.packet)
                found.append(packet)
            else:
                result.others.append((packet, UNREADABLE, "fragments beyond the largest packet"))
        if not found:
            return result
        packets, fragments = found, ()
        headers = classify(room.buffer, _column(found, "start"), _column(found, "held"), _column(found, "size"),
                           _column(found, "link").astype(np.int32))
        special = headers.special
        _take(result, found, headers, room.buffer)
    result.others += [(packets[int(i)], UNREADABLE, "too many headers") for i in special[:, 0]]
    return result


def _inner(outer: Packet, data: bytes, kind: int, at: int, stop: int) -> Packet | tuple[int, str]:
    """Return the packet inside, or (verdict, reason) of the outer one."""
    try:
        inside = look_inside(data, kind, at, stop)
    except CutShort:
        return (CUT, "") if outer.held < outer.size else (UNREADABLE, "truncated header")
    except Exception as error:      # noqa: BLE001  dpkt lets pass whatever its field access raises
        return UNREADABLE, f"malformed headers ({type(error).__name__})"
    in_ip = outer.in_ip or kind >= PROTOCOL
    if inside is None:
        return (OTHER_IP if in_ip else NOT_IP), ""
    end = min(inside.stop, outer.size)
    return Packet(outer.packet, outer.time, outer.order, outer.start + inside.at,
                  max(min(end, outer.held) - inside.at, 0), max(end - inside.at, 0), inside.link, outer.records,
                  in_ip, outer.fragments)


def _take(result: Inside, packets: list[Packet], headers: Headers, buffer: NDArray[np.uint8]) -> None:
    """Add what the array path made of packets to the result."""
    if len(headers.row):
        columns = (_column(packets, name) for name in ("packet", "records", "time", "order"))
        result.datagrams.append(datagrams_of(buffer, headers, *columns))
        result.claimed += [packets[i] for i in headers.row.tolist()]
    for packet, verdict, reason in zip(packets, headers.verdict.tolist(), headers.reason.tolist(), strict=True):
        if verdict not in (UDP_ROW, SPECIAL):
            entry = OTHER_IP if verdict == NOT_IP and packet.in_ip else verdict
            result.others.append((packet, entry, REASONS[reason]))


def _column(packets: list[Packet], name: str) -> NDArray[np.int64]:
    return np.array([getattr(p, name) for p in packets], np.int64)


def datagrams_of(buffer: NDArray[np.uint8], h: Headers, packet: NDArray[np.int64], records: NDArray[np.int64],
                 time: NDArray[np.int64], order: NDArray[np.int64]) -> Datagrams:
    """Return the UDP rows of classified packets; packet, records, time and order have one row per packet."""
    return Datagrams(buffer, packet[h.row], records[h.row].astype(np.int32), time[h.row], order[h.row], h.start, h.held,
                     h.size, h.source_port, h.destination_port, h.source, h.destination, h.version, h.ident,
                     h.checksum)


def joined(buffer: NDArray[np.uint8], parts: list[Datagrams]) -> Datagrams:
    """Return datagrams of one buffer as one batch, in the order of their packets."""
    columns = [name for name in Datagrams.__slots__ if name != "buffer"]
    batch = Datagrams(buffer, *(np.concatenate([getattr(p, name) for p in parts]) for name in columns))
    by_packet = np.argsort(batch.packet, kind="stable")
    return Datagrams(buffer, *(getattr(batch, name)[by_packet] for name in columns))
