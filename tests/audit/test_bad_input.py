"""Damaged captures and wrong calls: what could be read is reported, the rest is told, nothing is dropped in silence."""

import gzip
import struct
from pathlib import Path

import pytest

import pcaptool
from pcaptool.problem import UsageError
from pcaptool.simulate import make_plan, simulate


@pytest.fixture(scope="module")
def capture():
    plan = make_plan({"seed": 3, "start": "2026-03-01T00:00:00Z", "duration": "300 s", "foreign": 8,
                      "link": [{"gateway": 1, "key": {"unit": 1}, "interval": "10 s", "kinds": ["level"]}]}, "test")
    return simulate("merrowdale", plan).captures[0]


def run(path, **options):
    audit = pcaptool.audit(path, profile="merrowdale", **options)
    result = audit.result
    audit.close()
    return result


def test_the_ledger_adds_up_whatever_byte_is_changed(capture, tmp_path):
    """Identity: entries sum to records for the file, and the audit never raises."""
    path = tmp_path / "a.pcap"
    for at in range(24, len(capture), 7):
        path.write_bytes(capture[:at] + bytes([capture[at] ^ 0xFF]) + capture[at + 1 :])
        result = run(path)
        entries = {k: v for k, v in result.ledger.items() if k not in ("records", "damaged_bytes")}
        assert sum(entries.values()) == result.ledger["records"], at
        for row in result.links:
            assert row["heard"] == row["intact"] + row["corrected"] + row["corrupted"] + row["short"], at


def test_the_rest_of_a_file_behind_a_broken_record_is_read(capture, tmp_path):
    at = 24
    for _ in range(10):
        at += 16 + struct.unpack_from("<I", capture, at + 8)[0]
    broken = capture[: at + 8] + b"\xff\xff\xff\xff" + capture[at + 12 :]
    path = tmp_path / "a.pcap"
    path.write_bytes(broken)
    whole, damaged = tmp_path / "b.pcap", run(path)
    whole.write_bytes(capture)
    assert damaged.ledger["records"] == run(whole).ledger["records"] - 1
    assert not damaged.whole
    assert f"at {at}: record length 4294967295" in str(damaged.captures[0]["damage"])


def test_a_cut_tail_is_told_and_the_rest_counted(capture, tmp_path):
    path = tmp_path / "a.pcap"
    path.write_bytes(capture[:-5])
    result = run(path)
    assert not result.whole and result.ledger["damaged_bytes"] > 0
    assert result.totals["heard"] > 20


def test_frames_cut_by_the_snap_length_are_short_and_never_a_failed_check(tmp_path):
    plan = make_plan({"seed": 3, "start": "2026-03-01T00:00:00Z", "duration": "300 s", "snap_length": 60,
                      "link": [{"gateway": 1, "key": {"unit": 1}, "interval": "10 s", "kinds": ["level"]}]}, "test")
    path = tmp_path / "a.pcap"
    path.write_bytes(simulate("merrowdale", plan).captures[0])
    result = run(path)
    assert result.totals["short"] == result.totals["heard"] > 0
    assert result.totals["corrupted"] == 0


def test_a_bad_file_does_not_spoil_the_others(capture, tmp_path):
    (tmp_path / "good.pcap").write_bytes(capture)
    (tmp_path / "empty.pcap").write_bytes(b"")
    (tmp_path / "text.pcap").write_text("no capture at all, but long enough to be looked at")
    (tmp_path / "nested.pcap.gz").write_bytes(gzip.compress(gzip.compress(capture)))
    result = run(tmp_path)
    told = {Path(p.file).name: p for p in result.problems}
    assert set(told) == {"empty.pcap", "text.pcap", "nested.pcap.gz"}
    assert "empty" in told["empty.pcap"].found
    assert "gzip inside gzip" in told["nested.pcap.gz"].found
    assert result.totals["heard"] > 0 and not result.whole


def test_a_folder_without_captures_is_a_wrong_call(tmp_path):
    with pytest.raises(UsageError) as caught:
        run(tmp_path)
    assert caught.value.problems[0].found == "a folder without captures"


def test_no_profile_fits_is_said(tmp_path, capture):
    path = tmp_path / "a.pcap"
    path.write_bytes(capture.replace(struct.pack(">H", 47310), struct.pack(">H", 9)))
    with pytest.raises(UsageError) as caught:
        pcaptool.audit(path)
    assert "no shipped profile" in caught.value.problems[0].found


def test_the_profile_is_found_without_being_named(tmp_path, capture):
    path = tmp_path / "a.pcap"
    path.write_bytes(capture)
    audit = pcaptool.audit(path)
    names = [p.name for p in audit.result.profiles]
    audit.close()
    assert names == ["merrowdale"]


def test_profiles_that_claim_the_same_datagrams_are_refused(tmp_path, capture):
    path = tmp_path / "a.pcap"
    path.write_bytes(capture)
    text = pcaptool.load_profile("merrowdale").text.replace('"merrowdale"', '"other"', 1)
    (tmp_path / "other.toml").write_text(text)
    with pytest.raises(UsageError) as caught:
        pcaptool.audit(path, profile=["merrowdale", tmp_path / "other.toml"])
    assert "which profile merrowdale claims too" in caught.value.problems[0].found
