"""IP fragments: put together in any order, given up, and joined across pieces and files."""

import random
import struct

import numpy as np
import pytest
from building import START, ethernet, ipv4, ipv6, pcap, read, read_pieces, rows_of, udp
from hypothesis import given, settings
from hypothesis import strategies as st

from pcaptool.capture import OpenFragment, Piece, join_fragments, survey
from pcaptool.capture.fragments import MOST_BYTES, TIME_OUT, Reassembly

PAYLOAD = np.random.default_rng(5).integers(0, 256, 2000, np.uint8).tobytes()
WHOLE = udp(PAYLOAD)


def cut4(data, at=(0, 800, 1600), ident=7, protocol=17):
    """Return IPv4 fragments of a payload that begin at some offsets."""
    ends = [*at[1:], len(data)]
    return [ipv4(data[a:e], protocol, ident, a // 8 | (0x2000 if e < len(data) else 0))
            for a, e in zip(at, ends, strict=True)]


def cut6(data, at=(0, 800, 1600), ident=7, following=17):
    ends = [*at[1:], len(data)]
    return [ipv6(struct.pack(">BBHI", following, 0, a | (e < len(data)), ident) + data[a:e], 44)
            for a, e in zip(at, ends, strict=True)]


def read_packets(folder, packets, link=101, times=None):
    path = folder / "x.pcap"
    path.write_bytes(pcap(packets, link=link, times=times))
    return read(path)


@pytest.mark.parametrize("cut", [cut4, cut6])
@pytest.mark.parametrize("order", [(0, 1, 2), (2, 1, 0), (1, 2, 0), (2, 0, 1)])
def test_fragments_in_any_order(cut, order, tmp_path):
    fragments = cut(WHOLE)
    other = ipv4(udp(b"between"))
    rows, account = read_packets(tmp_path, [fragments[order[0]], other, fragments[order[1]], fragments[order[2]]])
    assert [(r.packet, r.records, r.payload, r.size) for r in rows] == [
        (1, 1, b"between", 7), (3, 3, PAYLOAD, 2000)]
    assert rows[1].time == (START + 3) * 10**9 and rows[1].ports == (47310, 5000)
    assert sum(account.entries.values()) == 0 and account.open_fragments == []


def test_duplicated_fragments_count_as_records(tmp_path):
    a, b, c = cut4(WHOLE)
    rows, account = read_packets(tmp_path, [a, a, b, a, c])
    assert [(r.records, r.payload) for r in rows] == [(5, PAYLOAD)]


def test_the_bytes_that_came_first_stay(tmp_path):
    """A fragment that overlaps earlier ones, within or beyond the end, changes nothing that is there."""
    a, b, c = cut4(WHOLE)
    within = ipv4(b"\xff" * 400, 17, 7, 0x2000 | 20)
    beyond = ipv4(b"\xff" * 4000, 17, 7, 0x2000 | 240)
    rows, _ = read_packets(tmp_path, [a, within, c, beyond, b])
    assert [(r.records, r.payload) for r in rows] == [(5, PAYLOAD)]
    rows, _ = read_packets(tmp_path, [within, a, b, c])
    assert [(r.records, r.payload) for r in rows] == [(4, PAYLOAD[:152] + b"\xff" * 400 + PAYLOAD[552:])]


def test_datagrams_do_not_mix(tmp_path):
    """Identification, protocol, addresses and version each tell datagrams apart."""
    others = [cut4(WHOLE, ident=8), cut4(WHOLE, protocol=47), cut6(WHOLE),
              [f[:12] + b"\x0a\x3d\0\x09" + f[16:] for f in cut4(WHOLE)]]
    for other in others:
        a, b, c = cut4(WHOLE)
        rows, account = read_packets(tmp_path, [a, other[1], c])
        assert rows == [] and len(account.open_fragments) == 3


def test_a_datagram_is_given_up_after_30_seconds(tmp_path):
    a, b, c = cut4(WHOLE)
    late = [(START + s) * 10**9 for s in (0, 1, 31)]
    rows, account = read_packets(tmp_path, [a, b, c], times=late)
    assert rows == [] and account.entries["fragment_incomplete"] == 2 and len(account.open_fragments) == 1
    late[2] -= 10**9
    assert len(read_packets(tmp_path, [a, b, c], times=late)[0]) == 1


def test_fragments_of_what_is_no_udp(tmp_path):
    icmp = cut4(bytes(2000), protocol=1)
    rows, account = read_packets(tmp_path, icmp)
    assert rows == [] and account.entries["other_ip"] == 3
    short = cut4(udp(PAYLOAD, length=2009))
    rows, account = read_packets(tmp_path, short)
    assert rows == [] and account.entries["unreadable"] == 3 and account.reasons == {"UDP length": 3}


def test_a_cut_fragment_is_cut(tmp_path):
    a, b, c = cut4(WHOLE)
    rows, account = read_packets(tmp_path, [a, (b[:500], len(b)), c])
    assert rows == [] and account.entries["cut"] == 1 and len(account.open_fragments) == 2


def test_fragments_beyond_the_largest_packet(tmp_path):
    rows, account = read_packets(tmp_path, [ipv4(bytes(65_512), 17, 7, 0x2000), ipv4(bytes(16), 17, 7, 8189)])
    assert rows == [] and account.reasons == {"fragments beyond the largest packet": 2}
    largest = udp(bytes(65_515 - 8))
    rows, _ = read_packets(tmp_path, cut4(largest, at=(0, 32_000)))
    assert [r.size for r in rows] == [65_507]


@pytest.mark.parametrize("outer", [
    lambda p: p, lambda p: ipv4(p, 4), lambda p: ipv4(b"\0\0\x08\0" + p, 47), lambda p: ipv6(p, 4)])
def test_fragments_in_tunnels_and_tunnels_in_fragments(outer, tmp_path):
    rows, account = read_packets(tmp_path, [outer(f) for f in cut4(WHOLE)])
    assert [(r.records, r.payload) for r in rows] == [(3, PAYLOAD)]
    rows, account = read_packets(tmp_path, cut4(ipv4(WHOLE), protocol=4) + cut6(ipv6(WHOLE), following=41))
    assert [(r.packet, r.records, r.payload) for r in rows] == [(2, 3, PAYLOAD), (5, 3, PAYLOAD)]
    with_options = b"\x11\0" + bytes(6) + WHOLE
    rows, account = read_packets(tmp_path, cut6(with_options, following=60))
    assert [(r.records, r.payload) for r in rows] == [(3, PAYLOAD)] and sum(account.entries.values()) == 0


def test_fragments_within_fragments_are_not_followed(tmp_path):
    inner = cut4(WHOLE)[0]
    rows, account = read_packets(tmp_path, cut4(inner, at=(0, 400), protocol=4))
    assert rows == [] and account.reasons == {"fragment in a fragment": 2}


def test_fragments_that_scapy_made(tmp_path):
    from scapy.layers.inet import IP, UDP, fragment
    from scapy.layers.inet6 import IPv6, IPv6ExtHdrFragment, fragment6
    from scapy.layers.l2 import Ether
    from scapy.packet import Raw
    from scapy.utils import wrpcap

    datagram = UDP(sport=1, dport=2) / Raw(PAYLOAD)
    four = fragment(IP(src="10.61.0.1", dst="10.61.0.2", id=3) / datagram, 600)
    six = fragment6(IPv6(src="fd00::1", dst="fd00::2") / IPv6ExtHdrFragment(id=3) / datagram, 700)
    packets = [Ether() / p for p in [*four, *six]]
    random.Random(1).shuffle(packets)
    wrpcap(str(tmp_path / "scapy.pcap"), packets)
    rows, _ = read(tmp_path / "scapy.pcap")
    assert {(r.records, r.payload, len(r.source)) for r in rows} == {
        (len(four), PAYLOAD, 4), (len(six), PAYLOAD, 16)}


def traffic(seed: int) -> list[bytes]:
    """Datagrams in fragments with few identifications, so that those that lose some run into others."""
    rng = random.Random(seed)
    packets = []
    for _ in range(40):
        fragments = cut4(udp(rng.randbytes(100)), at=(0, 40, 80), ident=rng.randrange(4))
        rng.shuffle(fragments)
        packets += [f for f in fragments if rng.random() < 0.8]
        packets += [ipv4(udp(b"between"))] * rng.randrange(3)
    return packets


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("apart", [0.3, 4.0])
def test_pieces_give_what_the_whole_gives(seed, apart, tmp_path):
    packets = traffic(seed)
    times = [START * 10**9 + int(i * apart * 10**9) for i in range(len(packets))]
    path = tmp_path / "x.pcap"
    path.write_bytes(pcap(packets, link=101, times=times))
    whole, account = read(path)
    entries = dict(account.entries)
    entries["fragment_incomplete"] += len(account.open_fragments)
    assert any(r.records == 3 for r in whole)
    assert entries["fragment_incomplete"] or any(r.records > 3 for r in whole)
    for piece_bytes in (1, 150, 1000, 4000, 1 << 20):
        assert read_pieces(survey(path, piece_bytes).pieces)[:2] == (whole, entries), piece_bytes
    cuts = [read_pieces([Piece(path)]), read_pieces(survey(path, None).pieces)]
    assert all(c[:2] == (whole, entries) for c in cuts)


def test_pieces_hand_over_only_what_may_go_on_from_before(tmp_path):
    packets = [f for i in range(100) for f in cut4(WHOLE, ident=i)]
    times = [(START + i) * 10**9 for i in range(len(packets))]
    path = tmp_path / "x.pcap"
    path.write_bytes(pcap(packets, link=101, times=times))
    rows, account = read(Piece(path))
    assert len(account.open_fragments) < 40 and len(rows) > 85


def test_a_flood_of_open_datagrams_is_bounded(monkeypatch):
    from pcaptool.capture import fragments

    monkeypatch.setattr(fragments, "MOST_BYTES", 1 << 20)
    reassembly = Reassembly()
    for i in range(3000):
        assert reassembly.add(OpenFragment(i, 0, 0, (4, b"a", b"b", i), 0, True, bytes(1000))) is None
    assert len(reassembly.given_up) + len(reassembly.left()) == 3000
    assert sum(len(f.payload) for f in reassembly.left()) <= 1 << 20 < MOST_BYTES
    assert [f.packet for f in reassembly.given_up] == list(range(len(reassembly.given_up)))


def test_what_timed_out_is_given_up_without_more_of_it():
    reassembly = Reassembly()
    reassembly.add(OpenFragment(0, 0, 0, (4, b"a", b"b", 1), 0, True, b"12345678"))
    reassembly.expire(TIME_OUT + 2 * 10**9)
    assert len(reassembly.given_up) == 1 and reassembly.left() == []


@given(st.permutations(range(8)), st.integers(0, 7))
@settings(derandomize=True, deadline=None, max_examples=60)
def test_joined_fragments_have_an_entry_each(order, missing):
    at = tuple(range(0, 2000, 256))
    fragments = [OpenFragment(i, i, i, (4, b"\1\2\3\4", b"\5\6\7\x08", 9), a, a + 256 < len(WHOLE), WHOLE[a : a + 256])
                 for i, a in enumerate(at)]
    shuffled = [fragments[i] for i in order]
    datagrams, entries = join_fragments(shuffled)
    assert [r.payload for r in rows_of(datagrams)] == [PAYLOAD]
    assert [entries["frames"], entries["fragment_incomplete"]] == [shuffled, []]
    datagrams, entries = join_fragments([f for f in shuffled if f.packet != missing])
    assert len(datagrams) == 0 and len(entries["fragment_incomplete"]) == 7 and entries["frames"] == []


def test_joining_nothing():
    datagrams, entries = join_fragments([])
    assert len(datagrams) == 0 and datagrams.source.shape == (0, 2) and not any(entries.values())


def test_vlan_and_padding_round_fragments(tmp_path):
    frames = [ethernet(f, tags=[0x8100]) + bytes(20) for f in cut4(WHOLE)]
    rows, _ = read_packets(tmp_path, frames, link=1)
    assert [(r.records, r.payload) for r in rows] == [(3, PAYLOAD)]
