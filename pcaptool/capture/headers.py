"""Read the headers of many packets at once, from the link layer to UDP.

One pass over a batch of records: UDP datagrams become rows, everything else is counted by ledger
entry and reason, and what this pass does not know (tunnels, 802.2, fragments) is handed back.
"""

import numpy as np
from numba import njit
from numpy.typing import NDArray

# What became of a record; the entries of the ledger by their position in ENTRIES.
UDP_ROW, SLOW, FRAGMENT = -1, -2, -3
OTHER_IP, NOT_IP, CUT, UNREADABLE = 2, 3, 4, 7

REASONS = ("", "link type", "truncated header", "IP version", "IP header length", "IP length", "UDP length",
           "jumbogram", "extension headers")
LINK_TYPE, TRUNCATED, VERSION, HEADER_LENGTH, IP_LENGTH, UDP_LENGTH, JUMBOGRAM, EXTENSIONS = range(1, 9)

KNOWN_LINK_TYPES = (0, 1, 12, 14, 101, 108, 113, 228, 229, 276)


@njit(cache=True, nogil=True)
def u16(b: NDArray[np.uint8], p: int) -> int:
    """Return the big-endian 16-bit number at p."""
    return np.int64(b[p]) << 8 | np.int64(b[p + 1])


@njit(cache=True, nogil=True)
def u64(b: NDArray[np.uint8], p: int) -> np.uint64:
    """Return the big-endian 64-bit number at p."""
    value = np.uint64(0)
    for k in range(8):
        value = value << np.uint64(8) | np.uint64(b[p + k])
    return value


@njit(cache=True, nogil=True)
def network(b: NDArray[np.uint8], p: int, end: int, link: int) -> tuple[int, int]:
    """Return (ethertype, first byte of the network header); (0, 0) when the packet is too short.

    Link types are numbers of the IANA registry of PCAP-related link types. Raw IP answers with the
    ethertype of its version, and any unknown version as IPv4, whose reader refuses it.
    """
    if link == 1:
        at = p + 12
    elif link == 113:
        at = p + 14
    elif link == 276:
        if p + 20 > end:
            return 0, 0
        kind = u16(b, p)
        if kind != 0x8100 and kind != 0x88A8 and kind != 0x9100:
            return kind, p + 20
        at = p + 22
    elif link == 0 or link == 108:
        if p + 4 > end:
            return 0, 0
        family = np.int64(b[p + 3]) if b[p] == 0 and b[p + 1] == 0 else np.int64(b[p])
        if family == 2:
            return 0x0800, p + 4
        if family == 10 or family == 24 or family == 28 or family == 30:
            return 0x86DD, p + 4
        return 1, p + 4
    else:
        if p + 1 > end:
            return 0, 0
        return (0x86DD if b[p] >> 4 == 6 else 0x0800), p
    if at + 2 > end:
        return 0, 0
    kind = u16(b, at)
    while kind == 0x8100 or kind == 0x88A8 or kind == 0x9100:
        at += 4
        if at + 2 > end:
            return 0, 0
        kind = u16(b, at)
    return kind, at + 2


@njit(cache=True, nogil=True)
def ipv6_transport(b: NDArray[np.uint8], p: int, end: int, stop: int) -> tuple[int, int]:
    """Walk IPv6 extension headers; return (next header, its first byte).

    p is the first byte of the IPv6 header. Next header -1: bytes are missing; -2: no end in sight.
    """
    kind, at = np.int64(b[p + 6]), p + 40
    for _ in range(16):
        if kind != 0 and kind != 43 and kind != 60 and kind != 51:
            return kind, at
        if at + 2 > end:
            return -1, at
        following, length = np.int64(b[at]), np.int64(b[at + 1])
        at += (length + 2) * 4 if kind == 51 else (length + 1) * 8
        kind = following
        if at > stop:
            return -2, at
    return -2, at


@njit(cache=True, nogil=True)
def classify(
    b: NDArray[np.uint8], start: NDArray[np.int64], held: NDArray[np.int64], size: NDArray[np.int64],
    link: NDArray[np.int32], verdict: NDArray[np.int8], reason: NDArray[np.int8],
    row: NDArray[np.int64], payload: NDArray[np.int64], payload_held: NDArray[np.int32],
    payload_size: NDArray[np.int32], ports: NDArray[np.uint16], source: NDArray[np.uint64],
    destination: NDArray[np.uint64], version: NDArray[np.uint8], ident: NDArray[np.int32],
    checksum: NDArray[np.uint16],
) -> int:
    """Fill verdict and reason (record,) and one row per UDP datagram; return the number of rows.

    start, held, size, link  (record,)  first byte, bytes held, bytes on the wire, link type
    row      int64 (row,)  record of each UDP datagram; the arrays behind it as in Datagrams
    """
    n = 0
    for i in range(len(start)):
        p, end, wire = start[i], start[i] + held[i], start[i] + size[i]
        reason[i] = 0
        lt = link[i]
        if not (lt == 1 or lt == 0 or lt == 12 or lt == 14 or lt == 101 or lt == 108 or lt == 113 or lt == 228
                or lt == 229 or lt == 276):
            verdict[i], reason[i] = UNREADABLE, LINK_TYPE
            continue
        kind, ip = network(b, p, end, lt)
        cut = held[i] < size[i]
        missing = CUT if cut else UNREADABLE
        if kind == 0x0800:
            if ip + 20 > end:
                verdict[i], reason[i] = missing, 0 if cut else TRUNCATED
                continue
            first = b[ip]
            header = np.int64(first & 15) * 4
            if first >> 4 != 4:
                verdict[i], reason[i] = UNREADABLE, VERSION
                continue
            total = u16(b, ip + 2)
            if total == 0:
                total = wire - ip               # segmentation offload leaves the field empty
            if header < 20 or total < header:
                verdict[i], reason[i] = UNREADABLE, HEADER_LENGTH
                continue
            if ip + total > wire:
                verdict[i], reason[i] = UNREADABLE, IP_LENGTH
                continue
            protocol, udp, stop = np.int64(b[ip + 9]), ip + header, ip + total
            if u16(b, ip + 6) & 0x3FFF:
                verdict[i] = FRAGMENT
                continue
        elif kind == 0x86DD:
            if ip + 40 > end:
                verdict[i], reason[i] = missing, 0 if cut else TRUNCATED
                continue
            if b[ip] >> 4 != 6:
                verdict[i], reason[i] = UNREADABLE, VERSION
                continue
            length = u16(b, ip + 4)
            if length == 0 and b[ip + 6] == 0:
                verdict[i], reason[i] = UNREADABLE, JUMBOGRAM
                continue
            stop = ip + 40 + length
            if stop > wire:
                verdict[i], reason[i] = UNREADABLE, IP_LENGTH
                continue
            protocol, udp = ipv6_transport(b, ip, end, stop)
            if protocol == -1:
                verdict[i], reason[i] = missing, 0 if cut else TRUNCATED
                continue
            if protocol == -2:
                verdict[i], reason[i] = UNREADABLE, EXTENSIONS
                continue
            if protocol == 44:
                verdict[i] = FRAGMENT
                continue
        elif kind == 0:
            verdict[i], reason[i] = missing, 0 if cut else TRUNCATED
            continue
        else:
            slow = (2 <= kind < 1536 or kind == 0x8847 or kind == 0x8848 or kind == 0x8863 or kind == 0x8864)
            verdict[i] = SLOW if slow else NOT_IP
            continue
        if protocol != 17:
            verdict[i] = SLOW if protocol == 4 or protocol == 41 or protocol == 47 else OTHER_IP
            continue
        if udp + 8 > end:
            verdict[i], reason[i] = missing, 0 if cut else TRUNCATED
            continue
        length = u16(b, udp + 4)
        if length < 8 or udp + length > stop:
            verdict[i], reason[i] = UNREADABLE, UDP_LENGTH
            continue
        verdict[i] = UDP_ROW
        row[n] = i
        payload[n] = udp + 8
        payload_size[n] = length - 8
        payload_held[n] = min(length - 8, end - udp - 8)
        ports[n, 0], ports[n, 1] = u16(b, udp), u16(b, udp + 2)
        checksum[n] = u16(b, udp + 6)
        if kind == 0x0800:
            version[n], ident[n] = 4, u16(b, ip + 4)
            addresses = u64(b, ip + 12)
            source[n, 0] = destination[n, 0] = 0
            source[n, 1] = addresses >> np.uint64(32)
            destination[n, 1] = addresses & np.uint64(0xFFFFFFFF)
        else:
            version[n], ident[n] = 6, -1
            source[n, 0], source[n, 1] = u64(b, ip + 8), u64(b, ip + 16)
            destination[n, 0], destination[n, 1] = u64(b, ip + 24), u64(b, ip + 32)
        n += 1
    return n
