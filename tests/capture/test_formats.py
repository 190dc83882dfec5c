"""pcap, pcapng and their compressions: the same datagrams out of every dress."""

import bz2
import gzip
import lzma
import struct
import zlib
from fractions import Fraction

import pytest
from backports import zstd
from building import (
    START,
    block,
    enhanced,
    ethernet,
    interface,
    ipv4,
    ipv6,
    option,
    payloads,
    pcap,
    read,
    section,
    udp,
)
from hypothesis import given, settings
from hypothesis import strategies as st

from pcaptool.capture import survey
from pcaptool.capture.pcapng import LATEST, to_ns
from pcaptool.problem import CaptureError

FRAMES = [ethernet(ipv4(udp(p))) for p in payloads(40)]
COMPRESS = {"gzip": gzip.compress, "bzip2": lambda data: bz2.compress(data, 1), "xz": lzma.compress,
            "zstd": zstd.compress}


def read_bytes(folder, data, batch_bytes=1 << 16):
    path = folder / "capture"
    path.write_bytes(data)
    return read(path, batch_bytes)


@pytest.mark.parametrize("order", "<>")
@pytest.mark.parametrize("unit_ns", [1, 1000])
def test_classic_pcap(order, unit_ns, tmp_path):
    times = [START * 10**9 + i * 1_000_000_000 + 987_654_321 for i in range(len(FRAMES))]
    rows, account = read_bytes(tmp_path, pcap(FRAMES, order=order, unit_ns=unit_ns, times=times, snap=65_535))
    assert [r.payload for r in rows] == payloads(40)
    assert [r.time for r in rows] == [t // unit_ns * unit_ns for t in times] == [r.order for r in rows]
    assert [r.packet for r in rows] == list(range(40))
    assert (account.drops, account.snap_length, account.damage) == (None, 65_535, [])
    assert (account.first_time, account.last_time) == (rows[0].time, rows[-1].time)


def test_the_fcs_length_in_the_link_type_word_is_no_link_type(tmp_path):
    rows, account = read_bytes(tmp_path, pcap([f + bytes(4) for f in FRAMES], link=0x2400_0001))
    assert [r.payload for r in rows] == payloads(40) and account.link_types == {1: 40}


def test_batches_of_any_size_give_the_same(tmp_path):
    data = pcap(FRAMES * 20)
    assert read_bytes(tmp_path, data, 256) == read_bytes(tmp_path, data, 2 << 20)


def test_a_record_larger_than_a_batch_is_read(tmp_path):
    large = [ethernet(ipv4(udp(bytes(30_000)))), FRAMES[0], ethernet(ipv4(udp(bytes(60_000))))]
    rows, account = read_bytes(tmp_path, pcap(large), 512)
    assert [r.size for r in rows] == [30_000, len(payloads(1)[0]), 60_000] and not account.damage


def pcapng_of_two_sections() -> bytes:
    """Two sections of either byte order, every kind of packet block, drops, unknown blocks."""
    first = section("<") + block(0x0BAD, b"unknown") + interface(1, options=option(9, b"\x06"))
    first += interface(101, options=option(9, b"\x89") + option(14, struct.pack("<q", 100)))
    first += enhanced(FRAMES[0], START * 10**6 + 5) + enhanced(ipv4(udp(b"one")), START << 9 | 256, 1)
    first += block(4, b"names") + block(5, struct.pack("<III", 1, 0, 0) + option(5, struct.pack("<Q", 7))
                                        + option(7, struct.pack("<Q", 2)) + option(0, b""))
    first += block(5, struct.pack("<III", 1, 0, 0) + option(5, struct.pack("<Q", 9)) + option(0, b""))
    second = section(">") + interface(1, snap=60, options=option(9, b"\x09", ">"), order=">")
    ticks = (START + 300) * 10**9 + 7
    old = struct.pack(">HHIIII", 0, 3, ticks >> 32, ticks & 0xFFFFFFFF, len(FRAMES[1]), len(FRAMES[1]))
    second += block(2, old + FRAMES[1], ">")
    second += block(3, struct.pack(">I", 100) + FRAMES[2].ljust(60, b"\0")[:60], ">")
    second += enhanced(FRAMES[3], ticks + 1, order=">", options=option(4, struct.pack(">Q", 2), ">"))
    return first + second


def test_pcapng_sections_interfaces_and_packet_blocks(tmp_path):
    rows, account = read_bytes(tmp_path, pcapng_of_two_sections())
    s = START * 10**9
    late = (START + 300) * 10**9 + 7
    assert [r.time for r in rows] == [s + 5000, s + 100 * 10**9 + 500_000_000, late, late, late + 1]
    first, second, third, fourth = payloads(4)
    assert [r.payload for r in rows] == [first, b"one", second, third[:18], fourth]     # 60 octets of the third
    assert [r.size for r in rows] == [len(p) for p in (first, b"one", second, third, fourth)]
    assert account.format == "pcapng, little endian, 2 sections, 3 interfaces, us, ns, 2^-9 s"
    assert account.link_types == {1: 4, 101: 1} and account.damage == []
    assert account.drops == 9           # the latest statistics of an interface; more than 3 + 2 told by packets


def test_pcapng_that_tells_of_no_drops(tmp_path):
    data = section() + interface() + enhanced(FRAMES[0], START * 10**6)
    assert read_bytes(tmp_path, data)[1].drops is None
    told = data + block(5, struct.pack("<III", 0, 0, 0) + option(5, struct.pack("<Q", 0)))
    assert read_bytes(tmp_path, told)[1].drops == 0


@given(st.integers(0, 2**64 - 1), st.integers(0, 255), st.integers(-(2**40), 2**40))
@settings(derandomize=True, deadline=None, max_examples=400)
def test_time_stamps_of_any_resolution(ticks, resolution, offset):
    unit = Fraction(1, 2 ** (resolution & 127) if resolution & 128 else 10**resolution)
    exact = (Fraction(ticks) * unit + offset) * 10**9
    found = to_ns(ticks >> 32, ticks & 0xFFFFFFFF, resolution, offset)
    if abs(exact) < LATEST - 2 * 10**9:
        assert -1 < found - exact <= 0 and isinstance(found, int)
    else:
        assert abs(found) >= LATEST - 3 * 10**9 and (found > 0) == (exact > 0)


@pytest.mark.parametrize(("ticks", "offset", "expected"), [
    (2**64 - 1, 2**63 - 1, LATEST), (2**64 - 1, -(2**63), LATEST), (0, -(2**63), -LATEST),
    (2**63 + 5, -(2**63), 5 * 10**9)])
def test_a_time_out_of_reach_is_held_at_the_end_of_time(ticks, offset, expected):
    assert to_ns(ticks >> 32, ticks & 0xFFFFFFFF, 0, offset) == expected


@pytest.mark.parametrize("name", COMPRESS)
def test_compressed_captures(name, tmp_path):
    plain = pcap(FRAMES * 30)
    rows, account = read_bytes(tmp_path, COMPRESS[name](plain))
    assert (account.compression, account.size, account.damage) == (name, len(plain), [])
    assert rows == read_bytes(tmp_path, plain)[0]
    assert survey(tmp_path / "capture").pieces[0].start == 0


@pytest.mark.parametrize("name", COMPRESS)
def test_several_compressed_streams_are_one_capture(name, tmp_path):
    plain = pcap(FRAMES * 3)
    parts = [plain[:100], plain[100:1000], plain[1000:]]
    rows, account = read_bytes(tmp_path, b"".join(COMPRESS[name](p) for p in parts) + bytes(8))
    assert len(rows) == 120 and account.damage == []


@pytest.mark.parametrize("name", COMPRESS)
def test_a_cut_compressed_capture_is_read_up_to_the_cut(name, tmp_path):
    plain = pcap([ethernet(ipv4(udp(p))) for p in payloads(3000, most=200)])
    packed = COMPRESS[name](plain)
    rows, account = read_bytes(tmp_path, packed[: len(packed) // 2])
    assert account.damage[-1].reason == f"{name} stream ends early"
    assert len(rows) > (1000 if name in ("gzip", "xz") else 300)        # the others come in large blocks
    assert [r.payload for r in rows] == payloads(3000, most=200)[: len(rows)]


@pytest.mark.parametrize("name", COMPRESS)
def test_only_the_last_record_is_lost_before_a_wrong_check_value(name, tmp_path):
    """A small file is one block: the decompressor fails only behind its last byte."""
    packed = bytearray(COMPRESS[name](pcap(FRAMES)))
    if name == "zstd":
        packed = bytearray(zstd.compress(pcap(FRAMES), options={zstd.CompressionParameter.checksum_flag: 1}))
    packed[{"gzip": -8, "bzip2": -4, "xz": -40, "zstd": -1}[name]] ^= 1
    rows, account = read_bytes(tmp_path, bytes(packed))
    assert name in account.damage[-1].reason
    assert [r.payload for r in rows] in (payloads(40)[:39], payloads(40))


def test_a_broken_deflate_stream_gives_all_that_zlib_gives(tmp_path):
    plain = pcap([ethernet(ipv4(udp(p))) for p in payloads(4000, most=200)])
    packed = bytearray(gzip.compress(plain))
    packed[len(packed) // 2 : len(packed) // 2 + 200] = b"\xff" * 200
    inflate, expected = zlib.decompressobj(31), 0
    with pytest.raises(zlib.error):
        for i in range(len(packed)):            # one octet in, whatever comes out
            expected += len(inflate.decompress(bytes(packed[i : i + 1])))
    _, account = read_bytes(tmp_path, bytes(packed))
    assert account.size >= expected - 1 > len(plain) // 3
    assert "gzip stream broken" in account.damage[-1].reason


def test_bytes_behind_a_compressed_stream_are_told(tmp_path):
    rows, account = read_bytes(tmp_path, gzip.compress(pcap(FRAMES)) + b"something else")
    assert len(rows) == 40
    assert [d.reason for d in account.damage] == ["bytes behind the end of the gzip stream"]


def test_a_stream_that_explodes_is_stopped(tmp_path, monkeypatch):
    from pcaptool.capture import compression

    monkeypatch.setattr(compression, "EXPLODES_AT", 1 << 20)
    monkeypatch.setattr(compression, "EXPLODES_BY", 100)
    packed = gzip.compress(pcap(FRAMES) + bytes(50 << 20))
    rows, account = read_bytes(tmp_path, packed)
    assert len(rows) == 40 and account.size < 100 * len(packed) + compression.STEP
    assert account.damage[-1].reason == "gzip stream grows more than 100 times"


@pytest.mark.parametrize(("data", "place", "found"), [
    (b"", "", "an empty file"),
    (b"\x7fELF" + bytes(40), "offset 0", "first bytes 7f 45 4c 46"),
    (pcap(FRAMES)[:20], "offset 20", "the end of the file in its header"),
    (section()[:9], "offset 8", "byte-order magic 4d"),
    (section()[:8] + bytes(20), "offset 8", "byte-order magic 00 00 00 00"),
    (gzip.compress(b""), "", "nothing in a gzip stream"),
    (gzip.compress(b"level,gate\n"), "offset 0", "first bytes 6c 65 76 65 in a gzip stream"),
    (gzip.compress(bz2.compress(pcap(FRAMES))), "", "bzip2 inside gzip"),
    (gzip.compress(gzip.compress(pcap(FRAMES))), "", "gzip inside gzip"),
    (gzip.compress(pcap(FRAMES))[:12], "offset 0", "gzip stream ends early"),
])
def test_what_is_no_capture_says_so(data, place, found, tmp_path):
    path = tmp_path / "no.pcap"
    path.write_bytes(data)
    for use in (read, survey):
        with pytest.raises(CaptureError) as error:
            use(path)
        (problem,) = error.value.problems
        assert (problem.file, problem.place, problem.found) == (str(path), place, found)
        assert problem.expected and problem.fix


@pytest.mark.parametrize(("name", "found"), [("missing.pcap", "No such file or directory"), (".", "a folder")])
def test_what_cannot_be_opened_says_so(name, found, tmp_path):
    with pytest.raises(CaptureError, match=found):
        survey(tmp_path / name)


def test_no_datagrams_no_batches_of_none(tmp_path):
    rows, account = read_bytes(tmp_path, pcap([]))
    assert (rows, account.records, account.first_time) == ([], 0, None)
    rows, account = read_bytes(tmp_path, pcap([ethernet(ipv6(b"", 59), 0x86DD)]))
    assert rows == [] and account.entries["other_ip"] == 1
