"""Packets that the array path hands back, one by one through dpkt: tunnels, 802.2, fragments."""

import struct
from dataclasses import dataclass
from typing import Any

from pcaptool.capture.headers import KNOWN_LINK_TYPES

DEEPEST = 12        # headers in headers


@dataclass(slots=True)
class UdpFound:
    """A UDP datagram inside a packet."""

    source: bytes
    destination: bytes
    ident: int              # -1 for IPv6
    source_port: int
    destination_port: int
    checksum: int
    size: int               # payload bytes sent
    payload: bytes          # payload bytes held


@dataclass(slots=True)
class FragmentFound:
    """An IP fragment inside a packet."""

    source: bytes
    destination: bytes
    protocol: int
    ident: int
    offset: int
    more: bool
    payload: bytes
    whole: bool             # all its bytes were captured


Found = UdpFound | FragmentFound | str      # str: the ledger entry


def take_apart(data: bytes, wire: int, link: int) -> tuple[Found, str]:
    """Return what a packet holds and, for ``unreadable``, the reason. Never raises."""
    try:
        return _dig(_first_layer(data, link), len(data) < wire)
    except Exception as error:          # noqa: BLE001  dpkt raises whatever its field access raises
        if len(data) < wire:
            return "cut", ""
        return "unreadable", f"malformed headers ({type(error).__name__})"


def _first_layer(data: bytes, link: int) -> Any:
    import dpkt

    if link not in KNOWN_LINK_TYPES:
        raise ValueError("link type")
    if link == 1:
        return dpkt.ethernet.Ethernet(data)
    if link == 113:
        return dpkt.ethernet.Ethernet(bytes(12) + data[14:])
    if link == 276:
        return dpkt.ethernet.Ethernet(bytes(12) + data[:2] + data[20:])
    raw = data[4:] if link in (0, 108) else data
    return dpkt.ip6.IP6(raw) if raw[0] >> 4 == 6 else dpkt.ip.IP(raw)


def _dig(layer: Any, cut: bool) -> tuple[Found, str]:
    import dpkt

    ip: Any = None
    for _ in range(DEEPEST):
        if isinstance(layer, dpkt.ip.IP):
            ip = layer
            if layer.mf or layer.offset:
                payload = bytes(layer.data)
                sent = layer.len - layer.hl * 4
                return FragmentFound(bytes(layer.src), bytes(layer.dst), layer.p, layer.id, layer.offset,
                                     bool(layer.mf), payload[:sent], len(payload) >= sent), ""
        elif isinstance(layer, dpkt.ip6.IP6):
            ip = layer
            fragment = layer.extension_hdrs.get(dpkt.ip.IP_PROTO_FRAGMENT)
            if fragment is not None and (fragment.m_flag or fragment.frag_off):
                payload = bytes(layer.data)
                return FragmentFound(bytes(layer.src), bytes(layer.dst), fragment.nxt, fragment.id,
                                     fragment.frag_off * 8, bool(fragment.m_flag), payload, not cut), ""
        elif isinstance(layer, dpkt.udp.UDP):
            size = layer.ulen - 8
            if size < 0 or (not cut and size > len(layer.data)):
                return "unreadable", "UDP length"
            ident = ip.id if isinstance(ip, dpkt.ip.IP) else -1
            return UdpFound(bytes(ip.src), bytes(ip.dst), ident, layer.sport, layer.dport, layer.sum, size,
                            bytes(layer.data)[:size]), ""
        elif isinstance(layer, bytes):
            break
        layer = getattr(layer, "data", b"")
    if ip is not None:
        return ("cut", "") if cut and not layer else ("other_ip", "")
    return "not_ip", ""


def ipv6_fragment(data: bytes, at: int, end: int) -> FragmentFound | None:
    """Read an IPv6 fragment at its IPv6 header; None when it is malformed. RFC 8200, 4.5."""
    kind, place = data[at + 6], at + 40
    stop = at + 40 + struct.unpack_from(">H", data, at + 4)[0]
    while kind in (0, 43, 60, 51):
        following, length = data[place], data[place + 1]
        place += (length + 2) * 4 if kind == 51 else (length + 1) * 8
        kind = following
    if kind != 44 or place + 8 > end:
        return None
    following, _, field, ident = struct.unpack_from(">BBHI", data, place)
    return FragmentFound(data[at + 8 : at + 24], data[at + 24 : at + 40], following, ident, field >> 3 << 3,
                         bool(field & 1), data[place + 8 : min(stop, end)], stop <= end)


def ipv4_fragment(data: bytes, at: int, end: int) -> FragmentFound:
    """Read an IPv4 fragment at its header."""
    header = (data[at] & 15) * 4
    total, ident, field = struct.unpack_from(">HHH", data, at + 2)
    stop = at + total
    return FragmentFound(data[at + 12 : at + 16], data[at + 16 : at + 20], data[at + 9], ident,
                         (field & 0x1FFF) * 8, bool(field & 0x2000), data[at + header : min(stop, end)],
                         stop <= end)
