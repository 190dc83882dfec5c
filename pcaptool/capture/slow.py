"""Find the IP packet inside what the array path does not look into, one packet at a time.

dpkt reads the single headers (802.2, MPLS, PPPoE, GRE). Its packets as a whole are not relied on: it
looks into no more than two VLAN tags, guesses what is behind MPLS, writes lengths anew, and a packet
cut short comes out shorter without a word. Instead the place of the inner packet goes back to the
array path, so that the same rules hold at every depth.
"""

from collections.abc import Callable
from dataclasses import dataclass

from pcaptool.capture.headers import (
    ETHERNET,
    ETHERTYPE_IPV4,
    ETHERTYPE_IPV6,
    GRE,
    IP_IN_IP,
    IPV6_IN_IP,
    LEAST_ETHERTYPE,
    MPLS,
    MPLS_UPSTREAM,
    PPPOE_SESSION,
    PROTOCOL,
    RAW,
)

BRIDGED = 0x6558                    # Ethernet in GRE, RFC 1701
PPP_IPV4, PPP_IPV6 = 0x0021, 0x0057
MOST_LABELS = 24
GRE_ROUTING, GRE_VERSION = 0x4000, 0x0007


@dataclass(frozen=True, slots=True)
class Inside:
    """Where a packet inside a packet begins, where it ends on the wire, and its link type."""

    link: int
    at: int
    stop: int


class CutShort(Exception):
    """The octets held end within a header."""


def look_inside(data: bytes, kind: int, at: int, stop: int) -> Inside | None:
    """Return the IP packet or Ethernet frame inside a special packet; None when there is none.

    data  octets held, headers included; kind, at, stop  as in Headers.special, places in data
    Raises CutShort when ``data`` ends before that can be told.
    """
    seen = 0
    while kind not in (ETHERTYPE_IPV4, ETHERTYPE_IPV6, BRIDGED):
        if seen == MOST_LABELS:
            return None
        seen += 1
        step = _step(kind)
        if step is None:
            return None
        kind, at, stop = step(data, kind, at, stop)
    return Inside(ETHERNET if kind == BRIDGED else RAW, at, stop)


Step = Callable[[bytes, int, int, int], tuple[int, int, int]]
NOTHING = -1                        # a kind that has no step


def _step(kind: int) -> Step | None:
    if 0 <= kind < LEAST_ETHERTYPE:
        return _llc
    return {
        MPLS: _mpls, MPLS_UPSTREAM: _mpls, PPPOE_SESSION: _pppoe, PROTOCOL + GRE: _gre,
        PROTOCOL + IP_IN_IP: _ip_in_ip, PROTOCOL + IPV6_IN_IP: _ip_in_ip,
    }.get(kind)


def _octets(data: bytes, at: int, n: int) -> bytes:
    if at + n > len(data):
        raise CutShort
    return data[at : at + n]


def _llc(data: bytes, kind: int, at: int, stop: int) -> tuple[int, int, int]:
    """IEEE 802.2 with a length in place of the ethertype, and SNAP (RFC 1042)."""
    from dpkt.llc import LLC

    if kind >= 8:                                   # no length holds less (cooked captures write 4)
        stop = min(stop, at + kind)
    first = _octets(data, at, 3)
    if first[0] == 0x06:                            # the access point of IP
        return ETHERTYPE_IPV4, at + 3, stop
    header = LLC(_octets(data, at, 8))
    return (header.type if header.oui == 0 and header.type >= LEAST_ETHERTYPE else NOTHING), at + 8, stop


def _mpls(data: bytes, kind: int, at: int, stop: int) -> tuple[int, int, int]:
    """A label (RFC 3032); what is behind the last one shows by the version of IP."""
    from dpkt.ethernet import MPLSlabel

    label = MPLSlabel(_octets(data, at, 4))
    if not label.s:
        return kind, at + 4, stop
    version = _octets(data, at + 4, 1)[0] >> 4
    return {4: ETHERTYPE_IPV4, 6: ETHERTYPE_IPV6}.get(version, NOTHING), at + 4, stop


def _pppoe(data: bytes, kind: int, at: int, stop: int) -> tuple[int, int, int]:
    """A session packet (RFC 2516) and its PPP protocol field, one octet when compressed."""
    from dpkt.pppoe import PPPoE

    header = PPPoE(_octets(data, at, 8))
    if header.code:
        return NOTHING, at, stop
    stop = min(stop, at + 6 + header.len)
    short = data[at + 6] & 1
    protocol = data[at + 6] if short else header.ppp.p
    inner = {PPP_IPV4: ETHERTYPE_IPV4, PPP_IPV6: ETHERTYPE_IPV6}.get(protocol, NOTHING)
    return inner, at + (7 if short else 8), stop


def _gre(data: bytes, kind: int, at: int, stop: int) -> tuple[int, int, int]:
    """Generic routing encapsulation, RFC 2784 and RFC 2890."""
    from dpkt.gre import GRE as Header

    first = _octets(data, at, 4)
    header = Header(flags=int.from_bytes(first[:2], "big"), p=int.from_bytes(first[2:], "big"))
    if header.flags & (GRE_ROUTING | GRE_VERSION):
        return NOTHING, at, stop
    return (header.p if header.p >= LEAST_ETHERTYPE else NOTHING), at + len(header), stop


def _ip_in_ip(data: bytes, kind: int, at: int, stop: int) -> tuple[int, int, int]:
    """RFC 2003 and RFC 2473."""
    return (ETHERTYPE_IPV4 if kind == PROTOCOL + IP_IN_IP else ETHERTYPE_IPV6), at, stop

