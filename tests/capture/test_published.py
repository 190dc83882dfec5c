"""Values that are published, or worked by hand from what is; each names its source."""

import struct
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest
from building import PUBLISHED, Row, enhanced, ethernet, interface, option, pcap, read, section, udp

from pcaptool.capture import pcapng, read_datagrams, udp_checksum_ok
from pcaptool.capture.records import Piece, read_records
from pcaptool.capture.walkers import Records


def entries(kind: str) -> list[object]:
    return [pytest.param(e, id=f"{e['title']} {e['params'].get('name', '')}{e['input_hex'] or ''}"[:60])
            for e in PUBLISHED[kind]]


def write(folder: Path, data: bytes) -> Path:
    path = folder / "x.pcap"
    path.write_bytes(data)
    return path


@pytest.mark.parametrize("entry", entries("pcap_magic"))
def test_magic_tells_byte_order_and_fraction(entry, tmp_path):
    order = ">" if entry["expected"]["byte_order"] == "big" else "<"
    unit = entry["expected"]["fraction_unit"]
    data = pcap([b"x" * 14], order=order, unit_ns=1 if unit == "ns" else 1000)
    assert data[:4].hex() == entry["input_hex"], entry["source"]
    _, account = read(write(tmp_path, data))
    assert account.format == f"pcap, {entry['expected']['byte_order']} endian, {unit}"
    assert (account.resolution, account.records) == (unit, 1)


LINKS_WITH_IP = {"NULL": struct.pack("<I", 2), "RAW": b"", "LOOP": struct.pack(">I", 2), "IPV4": b"", "IPV6": b"",
                 "ETHERNET": ethernet(b""), "LINUX_SLL": bytes(14) + b"\x08\0", "LINUX_SLL2": b"\x08\0" + bytes(18)}


@pytest.mark.parametrize("entry", entries("linktype"))
def test_link_types_are_read_or_named(entry, tmp_path):
    from building import ipv4, ipv6

    name, number = entry["params"]["name"], entry["expected"]
    packet = (ipv6 if name == "IPV6" else ipv4)(udp(b"level"))
    rows, account = read(write(tmp_path, pcap([LINKS_WITH_IP.get(name, b"") + packet], link=number)))
    assert account.link_types == {number: 1}, entry["source"]
    if name in LINKS_WITH_IP:
        assert [row.payload for row in rows] == [b"level"]
    else:
        assert account.entries["unreadable"] == 1 and account.reasons == {f"link type {number}": 1}


BLOCKS = {"section_header": pcapng.SECTION, "interface_description": pcapng.INTERFACE,
          "simple_packet": pcapng.SIMPLE_PACKET, "interface_statistics": pcapng.STATISTICS,
          "enhanced_packet": pcapng.ENHANCED_PACKET, "packet_obsolete": pcapng.OBSOLETE_PACKET,
          "decryption_secrets": pcapng.SECRETS, "byte_order_magic": pcapng.MAGIC}
OPTIONS = {"if_tsresol": pcapng.TSRESOL, "if_tsoffset": pcapng.TSOFFSET, "epb_dropcount": pcapng.DROPCOUNT,
           "isb_ifdrop": pcapng.IFDROP, "isb_osdrop": pcapng.OSDROP}


@pytest.mark.parametrize(("kind", "codes"), [("pcapng_block", BLOCKS), ("pcapng_option", OPTIONS)])
def test_pcapng_codes(kind, codes):
    published = {e["params"]["name"]: int(str(e["expected"]), 0) for e in PUBLISHED[kind]}
    assert codes == {name: published[name] for name in codes}


@pytest.mark.parametrize("entry", entries("pcap_file"))
def test_pcap_file(entry, tmp_path):
    expected = entry["expected"]
    path = write(tmp_path, bytes.fromhex(entry["input_hex"]))
    _, account = read(path)
    assert account.format == f"pcap, {expected['byte_order']} endian, {expected['fraction_unit']}"
    assert account.snap_length == expected["snaplen"] and list(account.link_types) == [expected["linktype"]]
    unit = 1 if expected["fraction_unit"] == "ns" else 1000
    check_records(path, [(p["seconds"] * 10**9 + p["fraction"] * unit, p) for p in expected["packets"]])


def check_records(path, expected):
    from pcaptool.capture.datagrams import Account

    records, found = Records(), []
    for b in read_records(Piece(path), Account(), records):
        for i in range(b.count):
            start, held = int(records.start[i]), int(records.held[i])
            found.append((int(records.time[i]), held, int(records.size[i]), b.buffer[start : start + held].tobytes()))
    assert found == [(time, p["captured"], p["original"], bytes.fromhex(p["data_hex"])) for time, p in expected]


def test_the_datagram_of_the_pcap_file(tmp_path):
    entry = PUBLISHED["pcap_file"][0]
    rows, _ = read(write(tmp_path, bytes.fromhex(entry["input_hex"])))
    time = 1_700_000_000_123_456_000
    assert rows == [Row(0, 1, time, time, b"\xc0\0\2\1", b"\xc0\0\2\2", (5000, 5001), 4, bytes.fromhex("02006ae4"))]


@pytest.mark.parametrize("entry", entries("pcapng_file"))
def test_pcapng_file(entry, tmp_path):
    expected = entry["expected"]
    path = write(tmp_path, bytes.fromhex(entry["input_hex"]))
    _, account = read(path)
    assert account.format == "pcapng, little endian, 1 section, 1 interface, ns"
    assert list(account.link_types) == expected["linktypes"]
    assert account.drops == sum(p["dropped_before"] for p in expected["packets"])
    check_records(path, [(p["seconds"] * 10**9 + p["nanoseconds"], p) for p in expected["packets"]])


@pytest.mark.parametrize("entry", entries("pcapng_timestamp"))
def test_pcapng_timestamp(entry, tmp_path):
    high, low = struct.unpack("<II", bytes.fromhex(entry["input_hex"]))
    resolution = option(9, bytes([entry["params"]["if_tsresol"]]))
    data = section() + interface(options=resolution) + enhanced(b"x" * 14, high << 32 | low)
    _, account = read(write(tmp_path, data))
    expected = datetime.fromisoformat(entry["expected"]).astimezone(UTC)
    whole = int((expected - datetime(1970, 1, 1, tzinfo=UTC)).total_seconds())
    assert account.first_time == whole * 10**9 + expected.microsecond * 1000, entry["source"]


@pytest.mark.parametrize("entry", entries("ipv4_header"))
def test_ipv4_header(entry, tmp_path):
    header, expected = bytes.fromhex(entry["input_hex"]), entry["expected"]
    body = bytearray(expected["total_length"] - expected["header_octets"])
    body[:8] = struct.pack(">HHHH", 1, 2, len(body), 0)
    rows, account = read(write(tmp_path, pcap([header + body], link=228)))
    if not expected["mf"] and not expected["fragment_offset_octets"]:
        assert [(row.source, row.size) for row in rows] == [(header[12:16], expected["total_length"] - 28)]
        return
    (fragment,) = account.open_fragments
    assert (fragment.offset, fragment.more, len(fragment.payload)) == (
        expected["fragment_offset_octets"], expected["mf"], len(body))
    assert fragment.key == (4, header[12:16], header[16:20], expected["identification"])
    assert fragment.protocol == expected["protocol"]


def test_the_fragments_of_the_ipv4_headers_make_one_datagram(tmp_path):
    payload = np.random.default_rng(1).integers(0, 256, 3972, np.uint8).tobytes()
    whole = struct.pack(">HHHH", 47310, 2, 3980, 0) + payload
    headers = [bytes.fromhex(e["input_hex"]) for e in PUBLISHED["ipv4_header"][1:]]
    packets = [h + whole[at : at + 1480] for h, at in zip(headers, (0, 1480, 2960), strict=True)]
    rows, account = read(write(tmp_path, pcap(packets, link=228)))
    assert [(r.packet, r.records, r.size, r.payload) for r in rows] == [(2, 3, 3972, payload)]
    assert sum(account.entries.values()) == 0


def checksum_ok(folder: Path, version: int, datagram: bytes, source: bytes, destination: bytes, held: int = 1 << 16
                ) -> int:
    from building import ipv4, ipv6

    packet = (ipv4 if version == 4 else ipv6)(datagram, source=source, destination=destination)
    (batch,) = read_datagrams(write(folder, pcap([(packet[:held], len(packet))], link=101)))
    return int(udp_checksum_ok(batch, np.arange(1))[0])


@pytest.mark.parametrize("entry", entries("udp_checksum"))
def test_udp_checksum(entry, tmp_path):
    p, datagram = entry["params"], bytes.fromhex(entry["input_hex"])
    source, destination = bytes.fromhex(p["src"]), bytes.fromhex(p["dst"])
    good = datagram[:6] + int(entry["expected"], 16).to_bytes(2, "big") + datagram[8:]
    assert checksum_ok(tmp_path, p["ip_version"], good, source, destination) == 1, entry["source"]
    for bit in range(len(good) * 8):            # every single wrong bit shows (in the length: not a datagram)
        wrong = bytearray(good)
        wrong[bit // 8] ^= 128 >> bit % 8
        if not 32 <= bit < 48 and wrong[6:8] != b"\0\0":
            assert checksum_ok(tmp_path, p["ip_version"], bytes(wrong), source, destination) == 0, bit


def test_udp_checksum_of_zero(tmp_path):
    (entry,) = PUBLISHED["rule"]
    datagram = udp(b"level")
    answers = {0: "invalid", 1: "valid", -1: "unchecked"}
    for version, octets in ((4, 4), (6, 16)):
        found = checksum_ok(tmp_path, version, datagram, bytes(octets), bytes(octets))
        assert answers[found] == entry["expected"][f"ipv{version}"], entry["source"]


@pytest.mark.parametrize("size", range(40))
def test_udp_checksum_of_any_length(size, tmp_path):
    """Against RFC 1071 as it is written down: 16-bit words added, carries added in."""
    payload = np.random.default_rng(size).integers(0, 256, size, np.uint8).tobytes()
    source, destination = b"\x0a\x3d\xff\xfe", b"\xc0\0\2\2"
    datagram = udp(payload)
    pseudo = source + destination + struct.pack(">HH", 17, len(datagram)) + datagram + b"\0"
    total = sum(pseudo[i] << 8 | pseudo[i + 1] for i in range(0, len(pseudo) - 1, 2))
    check = ~(total % 0xFFFF) & 0xFFFF
    good = datagram[:6] + struct.pack(">H", check) + payload
    assert checksum_ok(tmp_path, 4, good, source, destination) == 1
    assert checksum_ok(tmp_path, 4, good[:6] + struct.pack(">H", check ^ 256) + payload, source, destination) == 0


def test_udp_checksum_of_a_cut_datagram_is_not_checked(tmp_path):
    entry = PUBLISHED["udp_checksum"][0]
    datagram = bytes.fromhex(entry["input_hex"])
    assert checksum_ok(tmp_path, 4, datagram, b"\xc0\0\2\1", b"\xc0\0\2\2", held=30) == -1
