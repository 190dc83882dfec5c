"""Read the headers of many packets at once, from the link layer to UDP.

One pass over a batch of records: UDP datagrams become rows, everything else gets a verdict, a ledger
entry as far as this pass can tell. What it cannot finish itself (fragments, tunnels, 802.2 with an IP
packet inside) is listed as special, with the place where it stopped.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from pcaptool.capture.walk import Number

# Verdicts: ledger entries by their position in ENTRIES, and what is no entry.
OTHER_IP, NOT_IP, CUT, UNREADABLE = 2, 3, 4, 7
UDP_ROW, SPECIAL = 8, 9

REASONS = ("", "link type", "truncated header", "IP version", "IP header length", "IP length", "UDP length",
           "jumbogram", "extension headers")
LINK_TYPE, TRUNCATED, VERSION, HEADER_LENGTH, IP_LENGTH, UDP_LENGTH, JUMBOGRAM, EXTENSIONS = range(1, 9)

# Link types of the IANA registry of PCAP-related link types; 12 and 14 are raw IP on some systems.
NULL, ETHERNET, RAW, LOOP, COOKED, IPV4, IPV6, COOKED_2 = 0, 1, 101, 108, 113, 228, 229, 276

# Ethertypes, and what stands in their place: no octets left to tell, or a protocol that has none.
ETHERTYPE_IPV4, ETHERTYPE_IPV6 = 0x0800, 0x86DD
MPLS, MPLS_UPSTREAM, PPPOE_SESSION = 0x8847, 0x8848, 0x8864
LEAST_ETHERTYPE = 1536          # below: a length, with an 802.2 header behind it
SHORT, FOREIGN = -1, -2

# IP protocols, and the kind of a special packet: an ethertype, or PROTOCOL plus the IP protocol.
HOP_BY_HOP, IP_IN_IP, UDP, IPV6_IN_IP, ROUTING, FRAGMENT_HEADER, GRE, AUTHENTICATION, DESTINATION = (
    0, 4, 17, 41, 43, 44, 47, 51, 60)
PROTOCOL = 0x10000
FRAGMENT = PROTOCOL + FRAGMENT_HEADER


@njit(cache=True, nogil=True)
def u16(b: NDArray[np.uint8], p: Number) -> Number:
    """Return the big-endian 16-bit number at p."""
    q = np.uint64(p)
    return np.int64(b[q]) << 8 | np.int64(b[q + np.uint64(1)])


@njit(cache=True, nogil=True)
def u64(b: NDArray[np.uint8], p: Number) -> np.uint64:
    """Return the big-endian 64-bit number at p."""
    value, q = np.uint64(0), np.uint64(p)
    for k in range(8):
        value = value << np.uint64(8) | np.uint64(b[q + np.uint64(k)])
    return value


@njit(cache=True, nogil=True)
def network(b: NDArray[np.uint8], p: Number, end: Number, link: Number) -> tuple[Number, Number]:
    """Return (ethertype, first byte behind it) of a packet of a known link type that begins at p.

    Raw IP answers with the ethertype of its version, and any unknown version as IPv4, whose reader
    refuses it. SHORT: the packet ends before; FOREIGN: a loopback family that is no IP.
    """
    if link == ETHERNET:
        at = p + 12
    elif link == COOKED:
        at = p + 14
    elif link == COOKED_2:          # the ethertype is at the front, tags of a VLAN behind the header
        if p + 20 > end:
            return SHORT, p
        kind = u16(b, p)
        if kind != 0x8100 and kind != 0x88A8 and kind != 0x9100:
            return kind, p + 20
        at = p + 22
    elif link == NULL or link == LOOP:
        if p + 4 > end:
            return SHORT, p
        family = u16(b, p) | u16(b, p + 2)                          # either byte order: one octet is set
        if family > 255:
            family = FOREIGN if family & 255 else family >> 8
        if family == 2:
            return ETHERTYPE_IPV4, p + 4
        if family == 10 or family == 24 or family == 28 or family == 30:
            return ETHERTYPE_IPV6, p + 4
        return FOREIGN, p + 4
    else:
        if p + 1 > end:
            return SHORT, p
        return (ETHERTYPE_IPV6 if b[p] >> 4 == 6 else ETHERTYPE_IPV4), p
    if at + 2 > end:
        return SHORT, p
    kind = u16(b, at)
    while kind == 0x8100 or kind == 0x88A8 or kind == 0x9100:
        at += 4
        if at + 2 > end:
            return SHORT, p
        kind = u16(b, at)
    return kind, at + 2


@njit(cache=True, nogil=True)
def ipv6_transport(b: NDArray[np.uint8], p: Number, end: Number, stop: Number) -> tuple[Number, Number]:
    """Walk IPv6 extension headers; return (next header, its first byte). RFC 8200, 4.

    p is the first byte of the IPv6 header. Next header -1: bytes are missing; -2: no end in sight.
    """
    kind, at = np.int64(b[p + 6]), p + 40
    for _ in range(16):
        if kind != HOP_BY_HOP and kind != ROUTING and kind != DESTINATION and kind != AUTHENTICATION:
            return kind, at
        if at + 2 > stop:
            return -2, at
        if at + 2 > end:
            return -1, at
        following, length = np.int64(b[at]), np.int64(b[at + 1])
        at += (length + 2) * 4 if kind == AUTHENTICATION else (length + 1) * 8
        kind = following
        if at > stop:
            return -2, at
    return -2, at


@njit(cache=True, nogil=True)
def may_hold_udp(protocol: Number, version: int) -> bool:
    """Return whether UDP may lie behind an IP protocol that this module does not look into."""
    if protocol == IP_IN_IP or protocol == IPV6_IN_IP or protocol == GRE or protocol == AUTHENTICATION:
        return True
    return version == 6 and (protocol == HOP_BY_HOP or protocol == ROUTING or protocol == DESTINATION)


@njit(cache=True, nogil=True)
def _classify(
    b: NDArray[np.uint8], start: NDArray[np.int64], held: NDArray[np.int64], size: NDArray[np.int64],
    link: NDArray[np.int32], verdict: NDArray[np.uint8], reason: NDArray[np.uint8], special: NDArray[np.int64],
    row: NDArray[np.int64], payload: NDArray[np.int64], payload_held: NDArray[np.int32],
    payload_size: NDArray[np.int32], source_port: NDArray[np.uint16], destination_port: NDArray[np.uint16],
    source: NDArray[np.uint64], destination: NDArray[np.uint64], version: NDArray[np.uint8],
    ident: NDArray[np.int32], checksum: NDArray[np.uint16],
) -> tuple[int, int]:
    """Fill the arrays of Headers from those of ``classify``; return (rows, special packets)."""
    n, specials = 0, 0
    for i in range(len(start)):
        p, end, wire = start[i], start[i] + held[i], start[i] + size[i]
        lt = link[i]
        reason[i] = 0
        verdict[i] = UNREADABLE         # until shown to be something better
        if not (lt == ETHERNET or lt == RAW or lt == NULL or lt == LOOP or lt == COOKED or lt == COOKED_2
                or lt == IPV4 or lt == IPV6 or lt == 12 or lt == 14):
            reason[i] = LINK_TYPE
            continue
        kind, ip = network(b, p, end, lt)
        missing, why = (CUT, 0) if held[i] < size[i] else (UNREADABLE, TRUNCATED)
        if kind == ETHERTYPE_IPV4:
            if ip + 20 > end:
                verdict[i], reason[i] = missing, why
                continue
            if b[ip] >> 4 != 4:
                reason[i] = VERSION
                continue
            header, total = np.int64(b[ip] & 15) * 4, u16(b, ip + 2)
            if total == 0:
                total = wire - ip               # segmentation offload leaves the field empty
            if header < 20 or total < header:
                reason[i] = HEADER_LENGTH
                continue
            protocol, at, stop = np.int64(b[ip + 9]), ip + header, ip + total
            if stop > wire:
                reason[i] = IP_LENGTH
                continue
            fragment = u16(b, ip + 6) & 0x3FFF != 0
            if protocol == AUTHENTICATION and not fragment:
                if at + 2 > end:
                    verdict[i], reason[i] = missing, why
                    continue
                protocol, at = np.int64(b[at]), at + (np.int64(b[at + 1]) + 2) * 4      # RFC 4302, 2.2
            v, behind = 4, protocol
        elif kind == ETHERTYPE_IPV6:
            if ip + 40 > end:
                verdict[i], reason[i] = missing, why
                continue
            if b[ip] >> 4 != 6:
                reason[i] = VERSION
                continue
            length = u16(b, ip + 4)
            if length == 0 and b[ip + 6] == HOP_BY_HOP:
                reason[i] = JUMBOGRAM
                continue
            stop = ip + 40 + length
            if stop > wire:
                reason[i] = IP_LENGTH
                continue
            protocol, at = ipv6_transport(b, ip, end, stop)
            fragment = protocol == FRAGMENT_HEADER
            if protocol == -2 or (fragment and at + 8 > stop):
                reason[i] = EXTENSIONS
                continue
            if protocol == -1 or (fragment and at + 8 > end):
                verdict[i], reason[i] = missing, why
                continue
            v, behind = 6, np.int64(b[at]) if fragment else protocol
        elif kind == SHORT or (0 <= kind < LEAST_ETHERTYPE and ip + 2 > end):
            verdict[i], reason[i] = missing, why
            continue
        else:
            ahead = kind == MPLS or kind == MPLS_UPSTREAM or kind == PPPOE_SESSION
            if 0 <= kind < LEAST_ETHERTYPE:     # 802.2: SNAP, or the access point of IP
                ahead = b[ip] == b[ip + 1] and (b[ip] == 0xAA or b[ip] == 0x06)
            verdict[i] = SPECIAL if ahead else NOT_IP
            if ahead:
                special[specials] = i, kind, ip, ip, wire
                specials += 1
            continue
        if behind != UDP and not may_hold_udp(behind, v):
            verdict[i] = OTHER_IP
            continue
        if fragment and stop > end:
            verdict[i] = CUT
            continue
        if fragment or protocol != UDP:
            verdict[i] = SPECIAL
            special[specials] = i, FRAGMENT if fragment else PROTOCOL + protocol, ip, at, stop
            specials += 1
            continue
        if at + 8 > stop:
            reason[i] = UDP_LENGTH
            continue
        if at + 8 > end:
            verdict[i], reason[i] = missing, why
            continue
        length = u16(b, at + 4)
        if length < 8 or at + length > stop:
            reason[i] = UDP_LENGTH
            continue
        verdict[i] = UDP_ROW
        row[n], payload[n] = i, at + 8
        payload_size[n], payload_held[n] = length - 8, min(length, end - at) - 8
        source_port[n], destination_port[n], checksum[n] = u16(b, at), u16(b, at + 2), u16(b, at + 6)
        version[n] = v
        if v == 4:
            ident[n] = u16(b, ip + 4)
            addresses = u64(b, ip + 12)
            source[n, 0] = destination[n, 0] = 0
            source[n, 1], destination[n, 1] = addresses >> np.uint64(32), addresses & np.uint64(0xFFFFFFFF)
        else:
            ident[n] = -1
            source[n, 0], source[n, 1] = u64(b, ip + 8), u64(b, ip + 16)
            destination[n, 0], destination[n, 1] = u64(b, ip + 24), u64(b, ip + 32)
        n += 1
    return n, specials


@dataclass(slots=True)
class Headers:
    """What became of a batch of packets.

    verdict, reason  uint8 (packet,)     position in ENTRIES, UDP_ROW or SPECIAL; position in REASONS
    special          int64 (special, 5)  packet, kind, first byte of the last network header, of what
                                         is behind it, and where that ends on the wire
    row              int64 (row,)        packet of each UDP datagram; the others as in Datagrams
    """

    verdict: NDArray[np.uint8]
    reason: NDArray[np.uint8]
    special: NDArray[np.int64]
    row: NDArray[np.int64]
    start: NDArray[np.int64]
    held: NDArray[np.int32]
    size: NDArray[np.int32]
    source_port: NDArray[np.uint16]
    destination_port: NDArray[np.uint16]
    source: NDArray[np.uint64]
    destination: NDArray[np.uint64]
    version: NDArray[np.uint8]
    ident: NDArray[np.int32]
    checksum: NDArray[np.uint16]


def classify(
    b: NDArray[np.uint8], start: NDArray[np.int64], held: NDArray[np.int64], size: NDArray[np.int64],
    link: NDArray[np.int32],
) -> Headers:
    """Return what lies in packets of a buffer.

    start, held, size, link  (packet,)  first byte, bytes held, bytes on the wire, link type
    """
    n = len(start)
    verdict, reason, special = np.empty(n, np.uint8), np.empty(n, np.uint8), np.empty((n, 5), np.int64)
    columns: list[Any] = [
        np.empty(n, np.int64), np.empty(n, np.int64), np.empty(n, np.int32), np.empty(n, np.int32),
        np.empty(n, np.uint16), np.empty(n, np.uint16), np.empty((n, 2), np.uint64), np.empty((n, 2), np.uint64),
        np.empty(n, np.uint8), np.empty(n, np.int32), np.empty(n, np.uint16),
    ]
    rows, specials = _classify(b, start, held, size, link, verdict, reason, special, *columns)
    return Headers(verdict, reason, special[:specials], *(c[:rows] for c in columns))
