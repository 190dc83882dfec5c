"""Damaged captures: read up to the damage, go on behind it, and account for every byte and record."""

import random
import struct

import pytest
from building import START, block, enhanced, ethernet, interface, ipv4, ipv6, option, payloads, pcap, read, section, udp
from hypothesis import given, settings
from hypothesis import strategies as st

from pcaptool.capture import read_datagrams
from pcaptool.problem import CaptureError

PAYLOADS = payloads(30)
FRAMES = [ethernet(ipv4(udp(p))) for p in PAYLOADS]
CLASSIC = pcap(FRAMES)
STARTS = [24 + sum(16 + len(f) for f in FRAMES[:i]) for i in range(31)]     # of records


def blocks() -> list[bytes]:
    return [section(), interface(options=option(9, b"\x06")),
            *(enhanced(f, (START + i) * 10**6) for i, f in enumerate(FRAMES)),
            block(5, struct.pack("<III", 0, 0, 0) + option(5, struct.pack("<Q", 3)))]


def read_bytes(folder, data, batch_bytes=1 << 16):
    path = folder / "x"
    path.write_bytes(data)
    return read(path, batch_bytes)


def numbers(rows):
    """Return which of PAYLOADS came."""
    return [PAYLOADS.index(r.payload) for r in rows]


def with_header(record: int, **fields: int) -> bytes:
    """Return CLASSIC with fields of a record header replaced."""
    data, at = bytearray(CLASSIC), STARTS[record]
    for name, value in fields.items():
        struct.pack_into("<I", data, at + 4 * ("seconds", "fraction", "held", "size").index(name), value)
    return bytes(data)


@pytest.mark.parametrize(("data", "reason"), [
    (with_header(7, held=0xFFFFFFFF), "record length 4294967295"),
    (with_header(7, held=0xFFFFFFFF, size=0xFFFFFFFF), "record length 4294967295"),
    (with_header(7, held=300_000, size=300_000), "record length 300000"),
    (with_header(7, held=200_000), f"record length 200000 of a packet of {len(FRAMES[7])}"),
    (with_header(7, fraction=1_000_000), "fraction of a second 1000000"),
    (with_header(7, held=0, size=0), "record of a packet without octets"),
    (with_header(7, held=100_000, size=100_000), "cut record"),
])
@pytest.mark.parametrize("batch_bytes", [300, 1 << 16])
def test_a_record_header_that_cannot_be(data, reason, batch_bytes, tmp_path):
    rows, account = read_bytes(tmp_path, data, batch_bytes)
    assert numbers(rows) == [i for i in range(30) if i != 7]
    assert [(d.offset, d.skipped, d.reason) for d in account.damage] == [(STARTS[7], 16 + len(FRAMES[7]), reason)]
    assert account.records == 29 and [r.packet for r in rows] == list(range(29))


@pytest.mark.parametrize("garbage", [b"\0" * 5000, b"\xff" * 777, random.Random(3).randbytes(100_000)])
@pytest.mark.parametrize("batch_bytes", [300, 1 << 16])
def test_garbage_in_the_middle(garbage, batch_bytes, tmp_path):
    data = CLASSIC[: STARTS[12]] + garbage + CLASSIC[STARTS[12] :]
    rows, account = read_bytes(tmp_path, data, batch_bytes)
    assert numbers(rows) == list(range(30))
    assert [(d.offset, d.skipped) for d in account.damage] == [(STARTS[12], len(garbage))]


def test_overwritten_sectors_and_a_lost_stretch(tmp_path):
    holes = bytearray(CLASSIC)
    holes[STARTS[3] + 5 : STARTS[6] + 20] = b"U" * (STARTS[6] + 15 - STARTS[3])
    rows, account = read_bytes(tmp_path, bytes(holes) + CLASSIC[STARTS[20] + 7 :])
    assert numbers(rows) == [0, 1, 2, *range(7, 30), *range(21, 30)]
    assert [d.offset for d in account.damage] == [STARTS[3], STARTS[30]]


@pytest.mark.parametrize("cut", [1, 15, 16, 40])
def test_a_cut_tail(cut, tmp_path):
    rows, account = read_bytes(tmp_path, CLASSIC[: STARTS[29] + cut])
    assert numbers(rows) == list(range(29))
    (damage,) = account.damage
    assert (damage.offset, damage.skipped) == (STARTS[29], cut)
    assert damage.reason == ("cut record header" if cut < 16 else "cut record")


def test_a_damaged_time_costs_no_record(tmp_path):
    """A header that is whole but for its time is believed by the one behind it, and leads nobody astray."""
    data = bytearray(with_header(7, seconds=5))
    data[STARTS[8] : STARTS[8] + 16] = b"\xee" * 16
    rows, account = read_bytes(tmp_path, with_header(7, seconds=5))
    assert numbers(rows) == list(range(30)) and account.damage == []
    rows, account = read_bytes(tmp_path, bytes(data))       # nothing speaks for the time now
    assert numbers(rows) == [i for i in range(30) if i not in (7, 8)]
    assert [(d.offset, d.skipped, d.reason) for d in account.damage] == [
        (STARTS[7], STARTS[9] - STARTS[7], "time far from the record before")]


def test_a_clock_set_by_decades_is_believed(tmp_path):
    times = [(1000 if i < 15 else START) * 10**9 + i for i in range(30)]
    rows, account = read_bytes(tmp_path, pcap(FRAMES, times=times, unit_ns=1), 300)
    assert numbers(rows) == list(range(30)) and account.damage == []


def test_a_cut_header_of_the_first_record_and_nothing_behind(tmp_path):
    rows, account = read_bytes(tmp_path, CLASSIC[:30])
    assert (rows, account.records) == ([], 0) and account.damage[0].offset == 24 and account.damaged_bytes == 6


def test_a_capture_appended_to_a_cut_one(tmp_path):
    """The file header in the middle is damage; the records behind it are not."""
    rows, account = read_bytes(tmp_path, CLASSIC[: STARTS[10] + 9] + CLASSIC)
    assert numbers(rows) == [*range(10), *range(30)]
    assert [(d.offset, d.skipped) for d in account.damage] == [(STARTS[10], 9 + 24)]


def test_damage_before_the_first_record(tmp_path):
    rows, account = read_bytes(tmp_path, CLASSIC[:24] + b"\xee" * 100 + CLASSIC[24:])
    assert numbers(rows) == list(range(30)) and account.damaged_bytes == 100


@pytest.mark.parametrize(("change", "reason", "lost"), [
    (lambda b: b[:4] + b"\xff" * 4 + b[8:], "block length 4294967295", 1),
    (lambda b: b[:4] + b"\x0a\0\0\0" + b[8:], "block length 10", 1),
    (lambda b: b[:-4] + b"\0\0\0\0", "not repeated at the end of the block", 1),
    (lambda b: b[:8] + b"\x05\0\0\0" + b[12:], "malformed packet block", 1),
    (lambda b: b[:20] + b"\xff\xff\0\0" + b[24:], "malformed packet block", 1),
    (lambda b: b"\x0a\x0d\x0d\x0a" + b[4:], "section header without byte-order magic", 1),
    (lambda b: b"garbage, of no whole number of words" * 9 + b, "block length", 0),
    (lambda b: b"", "", 1),
])
@pytest.mark.parametrize("batch_bytes", [300, 1 << 16])
def test_damaged_blocks(change, reason, lost, batch_bytes, tmp_path):
    parts = blocks()
    offset = sum(map(len, parts[:9]))
    parts[9] = change(parts[9])
    rows, account = read_bytes(tmp_path, b"".join(parts), batch_bytes)
    assert numbers(rows) == [i for i in range(30) if i != 7 or not lost] and account.drops == 3
    if parts[9]:
        (damage,) = account.damage
        assert damage.offset == offset and reason in damage.reason


def test_a_cut_block(tmp_path):
    data = b"".join(blocks()[:12])
    rows, account = read_bytes(tmp_path, data[:-9])
    assert numbers(rows) == list(range(9)) and account.damage[0].reason == "cut block"
    rows, account = read_bytes(tmp_path, data + b"\x06\0\0")
    assert numbers(rows) == list(range(10)) and account.damage[0].reason == "cut block header"


SMALL = [
    pcap([ethernet(ipv4(udp(b"level"))), ethernet(ipv6(udp(b"gate"), 0x11), 0x86DD, tags=[0x8100]),
          ethernet(ipv4(udp(b"sluice" * 4)[:16], 17, 5, 0x2000)), ethernet(ipv4(udp(b"sluice" * 4)[16:], 17, 5, 2)),
          ethernet(b"\0\x03\x01\x40" + ipv4(b"\0\0\x08\0" + ipv4(udp(b"valve")), 47), 0x8847),
          ethernet(bytes(28), 0x0806), (ethernet(ipv4(udp(bytes(40))))[:50], 82)]),
    section() + interface(options=option(9, b"\x06")) + enhanced(ethernet(ipv4(udp(b"level"))), START * 10**6)
    + block(5, struct.pack("<III", 0, 0, 0) + option(5, struct.pack("<Q", 7)))
    + block(3, struct.pack("<I", 47) + ethernet(ipv4(udp(b"level")))) + section(">") + interface(101, order=">")
    + enhanced(ipv6(udp(b"gate")), START * 10**6, order=">", options=option(4, struct.pack(">Q", 2), ">")),
]


@pytest.mark.parametrize("whole", SMALL, ids=["pcap", "pcapng"])
def test_every_byte_may_be_wrong(whole, tmp_path):
    """Records, blocks, headers and damage add up to the file; ``read`` checks this and the ledger."""
    most = read_bytes(tmp_path, whole)[1].records
    for place in range(len(whole)):
        for value in {0, 0xFF, whole[place] ^ 1, whole[place] ^ 0x80} - {whole[place]}:
            wrong = whole[:place] + bytes([value]) + whole[place + 1 :]
            try:
                _, account = read_bytes(tmp_path, wrong)
            except CaptureError:
                assert place < 24
                continue
            assert account.size == len(wrong), (place, value)
            lost = most if whole is SMALL[1] and place < 60 else 2      # without their interface, all
            assert account.records >= most - lost, (place, value)


@pytest.mark.parametrize("whole", SMALL, ids=["pcap", "pcapng"])
def test_every_byte_may_be_the_last_or_be_missing(whole, tmp_path):
    for place in range(len(whole)):
        for wrong in (whole[:place], whole[:place] + whole[place + 1 :], whole[:place] + b"\x2a" + whole[place:]):
            try:
                _, account = read_bytes(tmp_path, wrong)
            except CaptureError:
                assert place < 24
            else:
                assert account.size == len(wrong)


FRONTS = [      # of packets that are true there, whatever is behind
    ethernet(ipv4(udp(b""))), ethernet(ipv6(udp(b""), 44), 0x86DD), ethernet(b"\xaa\xaa\x03\0\0\0\x08\0", 50),
    ethernet(b"\0\x03\x01\x40", 0x8847), ethernet(b"\x11\0\0\x07\0\x30\0\x21", 0x8864),
    ethernet(ipv4(b"\xb0\0\x08\0", 47)), ethernet(ipv4(ipv6(b"", 0), 41)), ethernet(ipv4(b"", 17, 1, 0x2001)),
]


packets = st.one_of(
    st.binary(min_size=1, max_size=80),
    st.builds(lambda front, tail, flips: bytes(b ^ flips.get(i, 0) for i, b in enumerate(front + tail)),
              st.sampled_from(FRONTS), st.binary(max_size=60),
              st.dictionaries(st.integers(12, 60), st.integers(0, 255), max_size=3)))


@given(st.lists(st.tuples(packets, st.integers(0, 30)), max_size=12), st.sampled_from([0, 1, 101, 108, 113, 276]))
@settings(derandomize=True, deadline=None, max_examples=250)
def test_any_packet_has_a_row_or_an_entry(tmp_path_factory, pairs, link):
    folder = tmp_path_factory.getbasetemp()
    _, account = read_bytes(folder, pcap([(p, len(p) + more) for p, more in pairs], link=link))
    assert account.records == len(pairs) and account.damage == []


@given(st.sampled_from([*SMALL, b"\x1f\x8b\x08\0", b"BZh9", b"\xfd7zXZ\0", b"\x28\xb5\x2f\xfd"]),
       st.integers(0, 200), st.binary(max_size=400))
@settings(derandomize=True, deadline=None, max_examples=250)
def test_any_bytes_give_rows_an_account_or_our_own_error(tmp_path_factory, front, kept, tail):
    data = front[:kept] + tail
    try:
        _, account = read_bytes(tmp_path_factory.getbasetemp(), data)
    except CaptureError as error:
        assert error.problems
    else:
        assert account.compression or account.size == len(data)


def test_a_length_is_no_reason_to_take_memory(tmp_path):
    import tracemalloc

    path = tmp_path / "x"
    path.write_bytes(section() + struct.pack("<II", 6, 1 << 24) + bytes(100))
    tracemalloc.start()
    list(read_datagrams(path))
    assert tracemalloc.get_traced_memory()[1] < 40 << 20
    tracemalloc.stop()
