"""Link types, IP versions, tunnels and the ledger; against scapy and dpkt where they can tell."""

import struct

import dpkt
import pytest
from building import ethernet, ipv4, ipv6, payloads, pcap, read, udp

BODY = udp(b"depth 0.42 m")


def read_one(folder, packet, link=1):
    path = folder / "x.pcap"
    path.write_bytes(pcap([packet], link=link))
    return read(path)


def given(account):
    return {name: n for name, n in account.entries.items() if n}


WITH_UDP = {
    "vlan": (ethernet(ipv4(BODY), tags=[0x8100]), 1),
    "four vlan tags": (ethernet(ipv4(BODY), tags=[0x88A8, 0x8100, 0x9100, 0x8100]), 1),
    "vlan ipv6": (ethernet(ipv6(BODY), 0x86DD, tags=[0x8100]), 1),
    "ipv4 options": (ethernet(ipv4(BODY, options=b"\x01" * 40)), 1),
    "padding behind": (ethernet(ipv4(BODY)) + b"\xaa" * 30, 1),
    "udp shorter than ip": (ethernet(ipv4(BODY + b"tail")), 1),
    "ip length 0, as segmentation offload leaves it": (ethernet(ipv4(BODY)[:2] + b"\0\0" + ipv4(BODY)[4:]), 1),
    "raw": (ipv4(BODY), 101), "raw 12": (ipv4(BODY), 12), "raw 14": (ipv6(BODY), 14), "ipv4": (ipv4(BODY), 228),
    "ipv6": (ipv6(BODY), 229),
    "null, little endian": (struct.pack("<I", 2) + ipv4(BODY), 0),
    "null, big endian": (struct.pack(">I", 2) + ipv4(BODY), 0),
    "null, ipv6, 24": (struct.pack("<I", 24) + ipv6(BODY), 0),
    "null, ipv6, 28, big endian": (struct.pack(">I", 28) + ipv6(BODY), 0),
    "null, ipv6, 30": (struct.pack("<I", 30) + ipv6(BODY), 0),
    "loop": (struct.pack(">I", 2) + ipv4(BODY), 108),
    "cooked": (struct.pack(">HHH8sH", 4, 1, 6, bytes(8), 0x0800) + ipv4(BODY), 113),
    "cooked, vlan": (struct.pack(">HHH8sHHH", 4, 1, 6, bytes(8), 0x8100, 5, 0x86DD) + ipv6(BODY), 113),
    "cooked 2": (struct.pack(">HHIHBB8s", 0x0800, 0, 1, 1, 0, 6, bytes(8)) + ipv4(BODY), 276),
    "cooked 2, vlan": (struct.pack(">HHIHBB8sHH", 0x8100, 0, 1, 1, 0, 6, bytes(8), 5, 0x0800) + ipv4(BODY), 276),
    "hop by hop": (ipv6(b"\x11\0" + bytes(6) + BODY, 0), 101),
    "routing, 24 octets": (ipv6(b"\x11\2" + bytes(22) + BODY, 43), 101),
    "hop by hop, destination, routing, destination": (
        ipv6(b"\x3c\0" + bytes(6) + b"\x2b\1" + bytes(14) + b"\x3c\0" + bytes(6) + b"\x11\0" + bytes(6) + BODY, 0),
        101),
    "authentication, ipv6": (ipv6(b"\x11\4" + bytes(22) + BODY, 51), 101),
    "authentication, ipv4": (ipv4(b"\x11\4" + bytes(22) + BODY, 51), 101),
    "fragment header of a whole datagram": (ipv6(b"\x11\0\0\0\0\0\0\7" + BODY, 44), 101),
    "snap": (ethernet(b"\xaa\xaa\x03\0\0\0\x08\0" + ipv4(BODY), 8 + len(ipv4(BODY))) + bytes(8), 1),
    "802.2, access point of ip": (ethernet(b"\x06\x06\x03" + ipv4(BODY), 3 + len(ipv4(BODY))), 1),
    "snap in cooked": (bytes(14) + b"\0\x04" + b"\xaa\xaa\x03\0\0\0\x08\0" + ipv4(BODY), 113),
    "mpls, 3 labels": (ethernet(b"\0\x01\0\x40\0\x02\0\x40\0\x03\x01\x40" + ipv4(BODY), 0x8847), 1),
    "mpls, ipv6": (ethernet(b"\0\x03\x01\x40" + ipv6(BODY), 0x8847, tags=[0x8100]), 1),
    "mpls, ipv4 with options": (ethernet(b"\0\x03\x01\x40" + ipv4(BODY, options=bytes(4)), 0x8848), 1),
    "pppoe": (ethernet(b"\x11\0\0\x07" + struct.pack(">HH", len(ipv4(BODY)) + 2, 0x21) + ipv4(BODY), 0x8864), 1),
    "pppoe, ipv6": (ethernet(b"\x11\0\0\x07" + struct.pack(">HH", len(ipv6(BODY)) + 2, 0x57) + ipv6(BODY), 0x8864), 1),
    "pppoe, compressed": (ethernet(b"\x11\0\0\x07" + struct.pack(">HB", len(ipv4(BODY)) + 1, 0x21) + ipv4(BODY),
                                   0x8864), 1),
    "ip in ip": (ipv4(ipv4(BODY), 4), 101), "6 in 4": (ipv4(ipv6(BODY), 41), 101), "4 in 6": (ipv6(ipv4(BODY), 4), 101),
    "6 in 6": (ipv6(ipv6(BODY), 41), 101),
    "gre": (ipv4(b"\0\0\x08\0" + ipv4(BODY), 47), 101),
    "gre, checksum, key, sequence": (ipv4(b"\xb0\0\x86\xdd" + bytes(12) + ipv6(BODY), 47), 101),
    "gre, bridged": (ipv4(b"\0\0\x65\x58" + ethernet(ipv4(BODY), tags=[0x8100]), 47), 101),
    "gre, mpls": (ipv4(b"\0\0\x88\x47" + b"\0\x03\x01\x40" + ipv4(BODY), 47), 101),
    "six tunnels": (ipv4(ipv4(ipv4(ipv4(ipv4(ipv4(ipv4(BODY), 4), 4), 4), 4), 4), 4), 101),
    "empty": (ipv4(udp(b"")), 101),
}


@pytest.mark.parametrize("name", WITH_UDP)
def test_udp_is_found(name, tmp_path):
    packet, link = WITH_UDP[name]
    rows, account = read_one(tmp_path, packet, link)
    (row,) = rows
    assert row.payload == (b"" if name == "empty" else b"depth 0.42 m") and row.size == len(row.payload)
    assert (row.packet, row.records, row.ports, given(account)) == (0, 1, (47310, 5000), {})
    assert row.source[0] == (0x0A if len(row.source) == 4 else 0x20) and row.destination[-1] == 2
    assert account.link_types == {link: 1} and not account.open_fragments


WITHOUT = {
    "arp": (ethernet(bytes(28), 0x0806), 1, "not_ip", ""),
    "spanning tree": (ethernet(b"\x42\x42\x03" + bytes(35), 38), 1, "not_ip", ""),
    "novell raw": (ethernet(b"\xff\xff" + bytes(40), 42), 1, "not_ip", ""),
    "ethertype 0": (ethernet(bytes(40), 0), 1, "not_ip", ""),
    "snap of an organisation": (ethernet(b"\xaa\xaa\x03\0\0\x0c\x08\0" + ipv4(BODY), 60), 1, "not_ip", ""),
    "mpls without ip": (ethernet(b"\0\x03\x01\x40\0\0\0\0" + bytes(40), 0x8847), 1, "not_ip", ""),
    "labels without end": (ethernet(b"\0\x03\0\x40" * 40, 0x8847), 1, "not_ip", ""),
    "pppoe discovery": (ethernet(b"\x11\x09\0\0\0\0" + bytes(40), 0x8863), 1, "not_ip", ""),
    "pppoe, link control": (ethernet(b"\x11\0\0\x07\0\x0a\xc0\x21\x01\x01\0\x08" + bytes(30), 0x8864), 1, "not_ip", ""),
    "null, no ip": (struct.pack("<I", 23) + ipv4(BODY), 0, "not_ip", ""),
    "tcp": (ethernet(ipv4(bytes(20), 6)), 1, "other_ip", ""),
    "icmpv6": (ipv6(bytes(20), 58), 101, "other_ip", ""),
    "no next header": (ipv6(b"", 59), 101, "other_ip", ""),
    "tcp fragment": (ipv4(bytes(40), 6, flags_offset=0x2000), 101, "other_ip", ""),
    "tcp in ip in ip": (ipv4(ipv4(bytes(20), 6), 4), 101, "other_ip", ""),
    "gre without ip": (ipv4(b"\0\0\x88\xcc" + bytes(40), 47), 101, "other_ip", ""),
    "gre, arp": (ipv4(b"\0\0\x65\x58" + ethernet(bytes(28), 0x0806), 47), 101, "other_ip", ""),
    "gre, version 1": (ipv4(b"\x30\x01\x88\x0b" + bytes(40), 47), 101, "other_ip", ""),
    "link type 147": (bytes(40), 147, "unreadable", "link type 147"),
    "truncated ethernet": (bytes(13), 1, "unreadable", "truncated header"),
    "truncated vlan": (ethernet(b"", 0x8100), 1, "unreadable", "truncated header"),
    "truncated ip": (ethernet(ipv4(BODY)[:19]), 1, "unreadable", "truncated header"),
    "truncated label": (ethernet(b"\0\x03", 0x8847), 1, "unreadable", "truncated header"),
    "truncated gre": (ipv4(b"\0\0", 47), 101, "unreadable", "truncated header"),
    "ip version 5": (b"\x55" + ipv4(BODY)[1:], 101, "unreadable", "IP version"),
    "ethertype of 4, version 6": (ethernet(ipv6(BODY), 0x0800), 1, "unreadable", "IP version"),
    "ip header of 16": (b"\x44" + ipv4(BODY)[1:], 101, "unreadable", "IP header length"),
    "ip length below header": (ipv4(BODY)[:2] + b"\0\x13" + ipv4(BODY)[4:], 101, "unreadable", "IP header length"),
    "ip length beyond": (ipv4(BODY)[:-1], 101, "unreadable", "IP length"),
    "ipv6 length beyond": (ipv6(BODY)[:-1], 101, "unreadable", "IP length"),
    "inner ip length beyond the outer": (ipv4(ipv4(BODY)[:-1], 4) + b"x", 101, "unreadable", "IP length"),
    "udp length 7": (ipv4(udp(b"abc", length=7)), 101, "unreadable", "UDP length"),
    "udp length 0": (ipv6(udp(b"abc", length=0)), 101, "unreadable", "UDP length"),
    "udp length beyond ip": (ethernet(ipv4(udp(b"abc", length=12))) + b"xxxx", 1, "unreadable", "UDP length"),
    "udp header beyond ip": (ethernet(ipv4(BODY[:7])) + b"xxxx", 1, "unreadable", "UDP length"),
    "jumbogram": (ipv6(b"\x11\0\xc2\4\0\1\0\0", 0)[:4] + b"\0\0" + ipv6(b"\x11\0\xc2\4\0\1\0\0", 0)[6:], 101,
                  "unreadable", "jumbogram"),
    "extension headers beyond": (ipv6(b"\x11\7" + bytes(6) + BODY, 60), 101, "unreadable", "extension headers"),
    "extension headers without end": (ipv6((b"\x3c\0" + bytes(6)) * 20 + BODY, 60), 101, "unreadable",
                                      "extension headers"),
    "tunnels without end": (ipv4(ipv4(ipv4(ipv4(ipv4(ipv4(ipv4(ipv4(ipv4(ipv4(BODY, 4), 4), 4), 4), 4), 4), 4), 4),
                                      4), 4), 101, "unreadable", "too many headers"),
}


@pytest.mark.parametrize("name", WITHOUT)
def test_everything_else_has_its_entry(name, tmp_path):
    packet, link, entry, reason = WITHOUT[name]
    rows, account = read_one(tmp_path, packet, link)
    assert (rows, given(account), account.reasons) == ([], {entry: 1}, {reason: 1} if reason else {})


@pytest.mark.parametrize("name", [name for name in WITH_UDP if name != "empty"])
def test_cut_by_snap_length(name, tmp_path):
    """Cut anywhere: a datagram as soon as its UDP header is there, before that ``cut`` and nothing else."""
    packet, link = WITH_UDP[name]
    full = read_one(tmp_path, packet, link)[0][0]
    header = packet.rindex(BODY[:8]) + 8
    for held in range(len(packet)):
        (tmp_path / "x.pcap").write_bytes(pcap([(packet[:held], len(packet))], link=link))
        rows, account = read(tmp_path / "x.pcap")
        if "whole datagram" in name and held < packet.index(BODY) + len(BODY):
            assert (rows, given(account)) == ([], {"cut": 1})
        elif held < header:
            assert (rows, given(account)) == ([], {"cut": 1}), held
        else:
            payload = packet[header : min(held, header + full.size)]
            assert rows == [full._replace(payload=payload)] and given(account) == {}, held


def scapy_packets():
    from scapy.layers.inet import GRE, IP, TCP, UDP, IPOption_Router_Alert
    from scapy.layers.inet6 import IPv6, IPv6ExtHdrDestOpt, IPv6ExtHdrHopByHop, IPv6ExtHdrRouting
    from scapy.layers.l2 import ARP, LLC, SNAP, Dot1AD, Dot1Q, Dot3, Ether
    from scapy.layers.ppp import PPP, PPPoE
    from scapy.packet import Raw

    eth = Ether(src="02:00:00:00:00:01", dst="02:00:00:00:00:02")
    v4, v6 = IP(src="10.61.0.1", dst="10.61.0.2"), IPv6(src="fd00::1", dst="fd00::2")
    out = []
    for i, payload in enumerate(payloads(200, seed=3)):
        datagram = UDP(sport=47310, dport=1000 + i) / Raw(payload)
        out.append([
            lambda d: eth / v4 / d, lambda d: eth / Dot1Q(vlan=3) / v4 / d,
            lambda d: eth / Dot1AD(vlan=9) / Dot1Q(vlan=3) / v6 / d, lambda d: eth / v6 / IPv6ExtHdrHopByHop() / d,
            lambda d: eth / v6 / IPv6ExtHdrDestOpt() / IPv6ExtHdrRouting(addresses=["fd00::3"]) / d,
            lambda d: eth / IP(src="10.61.0.1", dst="10.61.0.2", options=[IPOption_Router_Alert()]) / d,
            lambda d: eth / v4 / TCP() / d.payload, lambda d: eth / ARP(), lambda d: eth / v4 / GRE() / v6 / d,
            lambda d: eth / PPPoE(sessionid=1) / PPP() / v4 / d,
            lambda d: Dot3(src=eth.src, dst=eth.dst) / LLC() / SNAP() / v4 / d,
            lambda d: eth / v4 / v6 / d,
        ][i % 12](datagram))
    return out


def test_totals_agree_with_scapy_and_dpkt(tmp_path):
    from scapy.layers.inet import UDP
    from scapy.utils import rdpcap, wrpcap

    path = tmp_path / "scapy.pcap"
    wrpcap(str(path), scapy_packets())
    rows, account = read(path)
    of_scapy = [(p[UDP].dport, bytes(p[UDP].payload)) for p in rdpcap(str(path)) if UDP in p]
    assert [(r.ports[1], r.payload) for r in rows] == of_scapy
    assert (account.records, account.entries["other_ip"], account.entries["not_ip"]) == (200, 17, 17)
    of_dpkt = 0
    with open(path, "rb") as file:
        for _, packet in dpkt.pcap.Reader(file):
            layer = dpkt.ethernet.Ethernet(packet)
            while not isinstance(layer, (bytes, dpkt.udp.UDP)):
                layer = layer.data
            of_dpkt += isinstance(layer, dpkt.udp.UDP) and len(layer.data)
    assert of_dpkt == sum(len(r.payload) for r in rows) > 4000


def test_checksums_that_scapy_wrote_are_good(tmp_path):
    import numpy as np
    from scapy.utils import wrpcap

    from pcaptool.capture import read_datagrams, udp_checksum_ok

    wrpcap(str(tmp_path / "scapy.pcap"), [p for i, p in enumerate(scapy_packets()) if i % 12 != 4])
    (batch,) = read_datagrams(tmp_path / "scapy.pcap")
    assert len(batch) > 145 and (udp_checksum_ok(batch, np.arange(len(batch))) == 1).all()
    assert list(udp_checksum_ok(batch, np.array([3, 1]))) == [1, 1]
