"""Surveys, pieces, and time made monotone: what is read does not depend on how it is cut."""

import hashlib
import random
from dataclasses import astuple

import pytest
from building import START, enhanced, ethernet, interface, ipv4, ipv6, payloads, pcap, read, read_pieces, section, udp

from pcaptool.capture import Piece, sha256, survey
from pcaptool.problem import CaptureError

FRAMES = [ethernet(ipv4(udp(p))) if i % 3 else ethernet(ipv6(p, 6), 0x86DD) for i, p in enumerate(payloads(60))]


def damaged(seed: int) -> bytes:
    rng = random.Random(seed)
    data = bytearray(pcap(FRAMES, times=[(START + i % 20) * 10**9 for i in range(60)]))
    for _ in range(5):
        at = rng.randrange(24, len(data))
        data[at : at + rng.randrange(1, 60)] = rng.randbytes(rng.randrange(1, 60))
    return bytes(data)


@pytest.mark.parametrize("seed", range(8))
def test_pieces_of_a_damaged_capture_give_what_the_whole_gives(seed, tmp_path):
    path = tmp_path / "x.pcap"
    path.write_bytes(damaged(seed))
    whole, account = read(path)
    assert account.damage and account.steps
    for piece_bytes in (1, 60, 333, 1000, 5000):
        pieces = survey(path, piece_bytes).pieces
        rows, entries, damage = read_pieces(pieces)
        assert rows == whole and damage == account.damage, piece_bytes
        assert entries == account.entries
        assert [p.start for p in pieces[1:]] == [p.stop for p in pieces[:-1]] and pieces[0].start == 0
    assert len(survey(path, 1).pieces) == account.records + 1       # the file header is one without records
    assert account.records > 45


def test_a_survey_tells_what_it_saw(tmp_path):
    path = tmp_path / "x.pcap"
    data = pcap(FRAMES)
    path.write_bytes(data)
    s = survey(path, 500, hashed=True)
    assert (s.size, s.first_time, s.format, s.compression) == (len(data), START * 10**9, "pcap, little endian, us", "")
    assert s.sha256 == sha256(path) == hashlib.sha256(data).hexdigest() and len(s.pieces) > 5
    assert s.pieces == survey(path, 500).pieces and survey(path).sha256 == ""
    for hashed in (True, False):
        assert survey(path, None, hashed).pieces == [Piece(path)]
        assert survey(path, len(data), hashed).pieces == [Piece(path, least_time=START * 10**9)]


@pytest.mark.parametrize("tail", [b"", b"bytes behind"])
def test_the_hash_of_a_compressed_capture_is_that_of_the_file(tail, tmp_path):
    import gzip

    path = tmp_path / "x.pcap.gz"
    path.write_bytes(gzip.compress(pcap(FRAMES)) + tail * 50_000)
    s = survey(path, 100, hashed=True)
    assert s.sha256 == sha256(path) and s.compression == "gzip" and s.pieces == [Piece(path)]


def test_pcapng_is_one_piece(tmp_path):
    path = tmp_path / "x.pcapng"
    path.write_bytes(section() + interface() + b"".join(enhanced(f, START * 10**6) for f in FRAMES))
    s = survey(path, 100)
    assert s.pieces == [Piece(path)] and s.first_time == START * 10**9 and s.format.startswith("pcapng")


def test_a_capture_without_records(tmp_path):
    path = tmp_path / "x.pcap"
    path.write_bytes(pcap([]))
    s = survey(path, 1, hashed=True)
    assert s.pieces == [Piece(path)] and s.first_time is None and s.sha256 == sha256(path)


def test_a_survey_of_what_is_no_capture_raises(tmp_path):
    with pytest.raises(CaptureError):
        survey(tmp_path / "missing", hashed=True)


def order_of(folder, seconds):
    path = folder / "x.pcap"
    path.write_bytes(pcap([FRAMES[1]] * len(seconds), times=[int((START + s) * 10**9) for s in seconds]))
    rows, account = read(path, 400)
    return [r.order / 10**9 - START for r in rows], account


def test_order_goes_on_over_steps_of_the_clock(tmp_path):
    order, account = order_of(tmp_path, [0, 1, 2, -10, -9, 100, 50, 51])
    assert order == [0, 1, 2, 2, 3, 112, 112, 113]
    s = [(packet, before / 10**9 - START, after / 10**9 - START) for packet, before, after in account.steps]
    assert s == [(3, 2, -10), (6, 100, 50)] and account.order_shift == 62 * 10**9
    assert (account.first_time, account.last_time) == ((START - 10) * 10**9, (START + 100) * 10**9)


def test_jitter_is_no_step(tmp_path):
    order, account = order_of(tmp_path, [0, 1, 0.5, 2, 1.0, 3])
    assert order == [0, 1, 0.5, 2, 1.0, 3] and account.steps == []
    assert order_of(tmp_path, [0, 1, -0.000001])[1].steps != []


def test_a_clock_that_only_steps_keeps_order_within_its_type(tmp_path):
    path = tmp_path / "x.pcap"
    path.write_bytes(pcap([FRAMES[1]] * 40, times=[0xFFFFFFFF * 10**9 * (i % 2) for i in range(40)]))
    rows, account = read(path)
    assert len(account.steps) == 19 and all(0 <= r.order < 2**63 for r in rows)


def test_accounts_compare_whole(tmp_path):
    path = tmp_path / "x.pcap"
    path.write_bytes(damaged(1))
    assert astuple(read(path, 300)[1]) == astuple(read(path, 1 << 20)[1])
