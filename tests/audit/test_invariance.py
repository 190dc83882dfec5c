"""A result depends on what was captured, not on how captures were cut, ordered, packed or spread over jobs."""

import gzip
import struct
from pathlib import Path

import pytest

import pcaptool
from pcaptool.audit import Options
from pcaptool.profile import load_profile, parse_profile
from pcaptool.simulate import make_plan, simulate

TABLES = ("links.csv", "gaps.csv", "intervals.csv")


def records(data: bytes) -> list[bytes]:
    """The records of a little-endian pcap file, headers included."""
    out, at = [], 24
    while at < len(data):
        size = struct.unpack_from("<I", data, at + 8)[0]
        out.append(data[at : at + 16 + size])
        at += 16 + size
    return out


@pytest.fixture(scope="module")
def capture():
    plan = make_plan({
        "seed": 5, "start": "2026-03-01T00:00:00Z", "duration": "3 h", "foreign": 100,
        "backhaul": [{"gateway": 1, "loss": 0.03}],
        "link": [
            {"gateway": 1, "key": {"unit": 1}, "interval": "10 s", "loss": 0.03, "bit_error_rate": 0.002},
            {"gateway": 1, "key": {"unit": 2}, "interval": "10 s", "first": 4, "repeat": 0.05, "late": 0.05},
            {"gateway": 2, "key": {"unit": 3}, "interval": "10 s", "first": 7, "bit_error_rate": 0.006},
        ]}, "test")
    return simulate("merrowdale", plan).captures[0]


def tables(paths, tmp_path, profile="merrowdale", **options):
    audit = pcaptool.audit(paths, profile=profile, options=Options(**options) if options else None)
    audit.write(tmp_path)
    frames = audit.frames.drop(columns=["capture", "packet"]).to_csv(index=False)
    errors = audit.errors.to_csv(index=False)
    audit.close()
    return [(tmp_path / name).read_bytes() for name in TABLES] + [frames, errors]


def cut(capture: bytes, places: list[int], folder: Path) -> list[Path]:
    parts, every = [], records(capture)
    for i, (a, b) in enumerate(zip([0, *places], [*places, len(every)], strict=True)):
        path = folder / f"part-{i}.pcap"
        path.write_bytes(capture[:24] + b"".join(every[a:b]))
        parts.append(path)
    return parts


@pytest.mark.parametrize("places", [[1], [500], [100, 101, 900], list(range(150, 2000, 150))])
def test_captures_cut_anywhere_and_given_in_any_order(capture, places, tmp_path):
    (tmp_path / "whole").mkdir()
    (tmp_path / "whole" / "a.pcap").write_bytes(capture)
    whole = tables([tmp_path / "whole"], tmp_path / "out-1")
    parts = cut(capture, places, tmp_path)
    assert tables(parts, tmp_path / "out-2") == whole
    assert tables(parts[::-1], tmp_path / "out-3") == whole


def test_compressed_captures_and_batches_do_not_matter(capture, tmp_path, monkeypatch):
    plain, packed = tmp_path / "a.pcap", tmp_path / "b.pcap.gz"
    plain.write_bytes(capture)
    packed.write_bytes(gzip.compress(capture))
    whole = tables([plain], tmp_path / "out-1")
    assert tables([packed], tmp_path / "out-2") == whole
    monkeypatch.setattr("pcaptool.capture.walkers.BATCH_RECORDS", 64)
    assert tables([plain], tmp_path / "out-3") == whole


@pytest.mark.parametrize("key", ['["wrapper.gateway", "unit"]', '["wrapper.gateway"]'])
def test_processes_and_pieces_give_the_same_bytes(key, capture, tmp_path, monkeypatch):
    """Also where the wrapper alone names the link, so that no key must be judged before the merge."""
    text = load_profile("merrowdale").text
    profile = parse_profile(text.replace('["wrapper.gateway", "unit"]', key).encode(), "t.toml")
    assert key in profile.text
    path = tmp_path / "a.pcap"
    path.write_bytes(capture)
    whole = tables([path], tmp_path / "out-1", profile, jobs=1)
    monkeypatch.setattr("pcaptool.audit.run.WORTH_PROCESSES", 1)
    monkeypatch.setattr("pcaptool.audit.run.PIECE_BYTES", 20_000)
    for jobs in (1, 2):
        out = tmp_path / f"jobs-{jobs}"
        assert tables([path], out, profile, jobs=jobs) == whole
        for name in ("summary.json", "report.html", "captures.csv", "frames.parquet", "errors.parquet"):
            assert (tmp_path / "out-1" / name).read_bytes() == (out / name).read_bytes(), name


def test_the_same_datagram_recorded_twice_counts_once(capture, tmp_path):
    """A mirror port shows a packet when it enters and again when it leaves, some microseconds later."""
    path, twice = tmp_path / "a.pcap", tmp_path / "b.pcap"
    path.write_bytes(capture)
    doubled = b""
    for record in records(capture):
        seconds, micro = struct.unpack_from("<II", record)
        micro += 40
        later = struct.pack("<II", seconds + micro // 1_000_000, micro % 1_000_000) + record[8:]
        doubled += record + later
    twice.write_bytes(capture[:24] + doubled)
    one = tables([path], tmp_path / "out-1")
    assert tables([twice], tmp_path / "out-2") == one
    audit = pcaptool.audit(twice, profile="merrowdale")
    ledger = audit.summary["ledger"]
    audit.close()
    assert ledger["duplicate_capture"] == ledger["frames"] > 0


def test_two_recorders_of_the_same_traffic_count_once(capture, tmp_path):
    (tmp_path / "x").mkdir()
    one, two = tmp_path / "x" / "a.pcap", tmp_path / "x" / "b.pcap"
    one.write_bytes(capture)
    shifted = b""
    for record in records(capture):
        seconds, micro = struct.unpack_from("<II", record)
        micro += 150
        shifted += struct.pack("<II", seconds + micro // 1_000_000, micro % 1_000_000) + record[8:]
    two.write_bytes(capture[:24] + shifted)
    assert tables([one, two], tmp_path / "out-2") == tables([one], tmp_path / "out-1")


def test_a_clock_that_goes_back_is_told_and_keeps_the_recorded_order(capture, tmp_path):
    every = records(capture)
    half = len(every) // 2
    back = b""
    for record in every[half:]:
        seconds = struct.unpack_from("<I", record)[0] - 600
        back += struct.pack("<I", seconds) + record[4:]
    path = tmp_path / "a.pcap"
    path.write_bytes(capture[:24] + b"".join(every[:half]) + back)
    audit = pcaptool.audit(path, profile="merrowdale")
    steps, notes, restarts = audit.captures["clock_steps"][0], audit.summary["notes"], audit.links["restarts"].sum()
    audit.close()
    assert steps == 1 and any("clock went back" in note for note in notes)
    assert restarts == 0


def test_clocks_that_jump_over_the_whole_range_again_and_again_are_survived(capture, tmp_path, monkeypatch):
    """A hostile file; the sum of its steps would not fit into the times of the tables."""
    jumping = b""
    for i, record in enumerate(records(capture)):
        jumping += struct.pack("<I", (2**32 - 1 - i) if i % 2 else i) + record[4:]
    for name in ("a.pcap", "b.pcap", "c.pcap"):
        (tmp_path / name).write_bytes(capture[:24] + jumping)
    monkeypatch.setattr("pcaptool.audit.run.WORTH_PROCESSES", 1)
    monkeypatch.setattr("pcaptool.audit.run.PIECE_BYTES", 20_000)
    audit = pcaptool.audit([tmp_path], profile="merrowdale")
    ledger = audit.summary["ledger"]
    audit.close()
    assert ledger["records"] == 3 * len(records(capture))
    assert ledger["frames"] > 0
