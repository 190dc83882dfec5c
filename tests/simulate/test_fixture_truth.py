"""The shipped captures: what they hold is what their truth and their counts say."""

import gzip
import json
from collections import Counter
from pathlib import Path

import crcmod.predefined
import pytest
from simulated import captured, merrowdale, positions, truth_of

FIXTURES = Path(__file__).parents[2] / "fixtures"


def octets(path: Path) -> bytes:
    data = path.read_bytes()
    return gzip.decompress(data) if path.suffix == ".gz" else data


@pytest.fixture(scope="module")
def truth() -> list[dict[str, str]]:
    return truth_of(octets(FIXTURES / "merrowdale" / "day.truth.csv.gz").decode())


def test_the_day_is_small_and_agrees_with_its_truth(truth: list[dict[str, str]]) -> None:
    files = list((FIXTURES / "merrowdale").iterdir())
    assert sum(path.stat().st_size for path in files) < 3_000_000
    captures = [captured(octets(path)) for path in sorted(files) if ".pcap" in path.name]
    assert len(captures) == 4
    heard = [row for row in truth if row["fate"] == "captured"]
    for row in heard:
        datagram = captures[int(row["capture"])][int(row["packet"])]
        assert datagram is not None
        frame = merrowdale(datagram.payload)
        assert frame.mark == 0x4D57 and frame.size == len(frame.air) and frame.gateway == int(row["gateway"])
    assert sum(map(len, captures)) == len(heard) + 600
    assert len(truth) == len(heard) + sum(row["fate"].startswith("lost_") for row in truth)


def test_every_link_has_the_damage_that_it_is_there_for(truth: list[dict[str, str]]) -> None:
    by_link: dict[str, list[dict[str, str]]] = {}
    for row in truth:
        by_link.setdefault(row["link"], []).append(row)
    assert set(by_link) == {"hollin/weir", "hollin/upper-sluice", "hollin/pump-house", "scar/spillway",
                            "hollin/intake"}
    fates = {link: Counter(row["fate"] for row in own) for link, own in by_link.items()}
    assert fates["hollin/weir"] == {"captured": 4320}
    assert fates["scar/spillway"]["lost_backhaul"] > 40 and not fates["scar/spillway"]["lost_air"]
    assert all(not fate["lost_backhaul"] for link, fate in fates.items() if link != "scar/spillway")
    dusk = Counter(row["sent"][11:13] in ("17", "18") for row in by_link["hollin/upper-sluice"]
                   for _ in positions(row))
    assert dusk[True] / 2 > 10 * dusk[False] / 22           # wrong bits an hour, within two hours and without
    assert max(int(row["wrong_bits"]) for row in by_link["hollin/pump-house"]) > 6
    intake = by_link["hollin/intake"]
    assert sum(row["restart"] == "true" for row in intake) == 2
    assert {row["counter"] for row in intake if row["restart"] == "true"} == {"0"}
    assert any(row["repeated"] == "true" for row in intake) and any(row["late"] == "true" for row in intake)


def test_the_standard_captures_hold_what_their_counts_say() -> None:
    counts = json.loads((FIXTURES / "standard" / "counts.json").read_text())
    # CRC-16/KERMIT is the frame check of IEEE 802.15.4, CRC-16/DNP that of IEEE 1815; crcmod computes them
    fcs, block = (crcmod.predefined.mkPredefinedCrcFun(name) for name in ("kermit", "crc-16-dnp"))
    for name, wrong in (
            ("ieee-802-15-4", lambda frame: fcs(frame[:-2]) != int.from_bytes(frame[-2:], "little")),
            ("ieee-1815", lambda frame: any(
                block(part[:-2]) != int.from_bytes(part[-2:], "little")
                for part in [frame[:10], *(frame[i : i + 18] for i in range(10, len(frame), 18))]))):
        frames = [d.payload for d in captured((FIXTURES / "standard" / f"{name}.pcap").read_bytes()) if d]
        bad = [i for i, frame in enumerate(frames) if wrong(frame)]
        own = counts[name]
        assert len(frames) == own["heard"] and bad == own["corrupted_packets"]
        assert len(bad) == own["corrupted"] and own["intact"] == own["heard"] - own["corrupted"]
