"""Whole simulations: what is in the captures is what the truth says."""

import gzip
from collections import Counter
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from simulated import captured, flipped, merrowdale, positions, rows

from pcaptool.problem import UsageError
from pcaptool.profile import Profile, encode_fields, load_profile, parse_profile
from pcaptool.simulate import TRUTH, Plan, Simulation, make_plan, run, simulate, truth_columns

ROUGH = {"interval": 2, "kinds": ["level"], "bit_error_rate": 0.002, "loss": 0.05, "repeat": 0.03,
         "late": 0.02}

TWO_ROUND_ONE = b"""
format = 1
name = "two-round-one"
title = "several frames in a datagram"
basis = "made for a test"
[carrier]
port = [50001]
net = ["198.51.100.0/24"]
[wrapper]
order = "little"
before = [
  { name = "mark", bytes = 1, must_be = 0x7E },
  { name = "frames", bytes = 1 },
  { name = "site", bytes = 1 },
]
each = [
  { name = "channel", bytes = 1 },
  { name = "size", bytes = 2, order = "big" },
  { name = "mask", bytes = 1 },
]
after = [{ name = "number", bytes = 2 }]
frames = "frames"
frame_bytes = "size"
frame_bytes_plus = -2
[[coding]]
step = "crc"
standard = "itu-t-v41"
[[coding]]
step = "whiten"
poly = "x^8 + x^4 + x^3 + x^2 + 1"
seed = 1
seed_from = "wrapper.mask"
[message]
fields = [{ name = "count", bits = 8 }, { name = "value", bits = 8 }]
[link]
by = ["wrapper.site", "wrapper.channel"]
[counter]
field = "count"
[backhaul]
counter = "wrapper.number"
by = ["wrapper.site"]
"""


def plan(*links: dict[str, Any], **rest: Any) -> Plan:
    each = [{"key": {"unit": i + 1}, **link} for i, link in enumerate(links)]
    return make_plan({"duration": 600, **rest, "link": each}, "test")


@pytest.fixture(scope="module")
def profile() -> Profile:
    return load_profile("merrowdale")


@pytest.fixture(scope="module")
def rough(profile: Profile) -> Simulation:
    links = [ROUGH | {"gateway": 1 + i % 2, "first": i / 10} for i in range(4)]
    return simulate(profile, plan(*links, split=3, foreign=40, backhaul=[{"loss": 0.04}]))


def clean_air(profile: Profile, row: dict[str, str]) -> bytes:
    """Return the air frame of a row of the truth, encoded again from its field values."""
    kind = row["kind_of_message"]
    raw = {}
    for name, field in profile.message_fields.items():
        if row[name]:
            known = {word: number for number, word in field.names.items()}
            value = known[row[name]] if row[name] in known else round(float(row[name]) / field.scale)
            raw[name] = np.array([value])
    return np.packbits(profile.chain.encode(encode_fields(profile, raw, kind))).tobytes()


def test_every_captured_frame_is_the_encoded_message_with_the_flipped_bits(
        profile: Profile, rough: Simulation) -> None:
    captures = [captured(data) for data in rough.captures]
    seen = Counter[tuple[int, int]]()
    for row in rows(rough):
        if row["fate"] != "captured":
            assert not any(row[name] for name in ("captured", "capture", "packet", "slot", "expected"))
            continue
        at = int(row["capture"]), int(row["packet"])
        seen[at] += 1
        datagram = captures[at[0]][at[1]]
        assert datagram is not None
        frame = merrowdale(datagram.payload)
        assert (frame.mark, frame.gateway, frame.size) == (0x4D57, int(row["gateway"]), 15)
        assert datagram.source == f"10.61.0.{10 + frame.gateway}"
        assert frame.air == flipped(clean_air(profile, row), positions(row))
        assert len(positions(row)) == int(row["wrong_bits"])
        assert row["expected"] == ("damaged" if positions(row) else "intact")
    assert set(seen.values()) == {1}
    ours = {(i, j) for i, c in enumerate(captures) for j, d in enumerate(c)
            if d is not None and d.payload[:2] == b"MW"}
    assert set(seen) == ours
    assert sum(map(len, captures)) == len(ours) + 40


def test_sent_is_captured_and_lost_on_the_air_and_on_the_backhaul(rough: Simulation) -> None:
    table = rows(rough)
    fates = Counter(row["fate"] for row in table)
    assert sum(fates.values()) == len(table) and set(fates) == {"captured", "lost_air", "lost_backhaul"}
    assert min(fates.values()) > 10
    for link in {row["link"] for row in table}:
        own = [row for row in table if row["link"] == link]
        first_sent = [row for row in own if row["repeated"] == "false"]
        assert [int(row["sequence"]) for row in first_sent] == list(range(300))
        assert [int(row["counter"]) for row in first_sent] == [i % 256 for i in range(300)]
        again = [row for row in own if row["repeated"] == "true"]
        assert len(again) >= 1
        assert {row["sequence"] for row in again} <= {row["sequence"] for row in first_sent}
    assert [row["sent"] for row in table] == sorted(row["sent"] for row in table)


def test_datagrams_lost_on_the_backhaul_leave_gaps_in_the_gateways_counter(rough: Simulation) -> None:
    datagrams = [d for data in rough.captures for d in captured(data) if d and d.payload[:2] == b"MW"]
    table = rows(rough)
    for gateway in (1, 2):
        own = [d for d in datagrams if merrowdale(d.payload).gateway == gateway]
        numbers = [merrowdale(d.payload).datagram for d in own]
        assert numbers == sorted(set(numbers))
        assert [d.ident for d in own] == [n + 1 for n in numbers]
        sent = [r for r in table if r["gateway"] == str(gateway) and r["fate"] != "lost_air"]
        lost = [r for r in sent if r["fate"] == "lost_backhaul"]
        assert len(numbers) == len(sent) - len(lost) and max(numbers) <= len(sent) - 1
        missing = set(range(len(sent))) - set(numbers)
        assert len(missing) == len(lost) > 3


def test_capture_files_follow_in_time(rough: Simulation) -> None:
    start = rough.plan.start_ns
    for i, data in enumerate(rough.captures):
        times = [d.time for d in captured(data) if d]
        assert times == sorted(times) and times[0] >= start + i * 200_000_000_000
        assert i == 2 or times[-1] < start + (i + 1) * 200_000_000_000


def test_the_same_seed_gives_the_same_bytes(profile: Profile, tmp_path: Path) -> None:
    def bytes_of(seed: int, name: str) -> list[bytes]:
        (tmp_path / name).mkdir()
        links = [ROUGH, ROUGH | {"burst": {"to_bad": 0.001, "to_good": 0.1}}]
        made = simulate(profile, plan(*links, seed=seed, foreign=5, split=2))
        paths = made.write(tmp_path / name / "a.pcap.gz")
        assert [p.name for p in paths] == ["a-01.pcap.gz", "a-02.pcap.gz", "a.truth.csv.gz"]
        return [p.read_bytes() for p in paths]

    first = bytes_of(3, "x")
    assert bytes_of(3, "y") == first and bytes_of(4, "z") != first
    assert gzip.decompress(first[0])[:4] == bytes.fromhex("d4c3b2a1")


def test_one_setting_leaves_the_draws_of_the_others_alone(profile: Profile) -> None:
    with_loss, without = (rows(simulate(profile, plan({"interval": 2, "bit_error_rate": 0.01, "loss": loss})))
                          for loss in (0.2, 0.0))
    for a, b in zip(with_loss, without, strict=True):
        same = ("sent", "counter", "depth", "position") + (("positions",) if a["fate"] == "captured" else ())
        assert [a[name] for name in same] == [b[name] for name in same]


def test_late_frames_are_overtaken_by_as_many_as_the_plan_says(profile: Profile) -> None:
    s = simulate(profile, plan({"interval": 2, "late": 0.1, "late_places": 3}))
    table = rows(s)
    order = sorted((row for row in table), key=lambda row: int(row["packet"]))
    late = [i for i, row in enumerate(order) if row["late"] == "true"]
    assert len(late) > 10
    for i in late:
        sequence = int(order[i]["sequence"])
        over = sum(int(row["sequence"]) > sequence for row in order[:i])
        assert over == 3 or sequence > 290
    prompt = [int(row["sequence"]) for row in order if row["late"] == "false"]
    assert prompt == sorted(prompt)


def test_a_restart_sets_the_counter(profile: Profile) -> None:
    # By hand: frames every 2 s from 0; the first at or after 7 s is number 4, at or after 15 s number 8.
    s = simulate(profile, plan({"interval": 2, "frames": 10, "first_counter": 254,
                                "restart": [{"at": 7, "to": 0}, {"at": "15 s", "to": 100}]}))
    table = rows(s)
    assert [int(row["counter"]) for row in table] == [254, 255, 0, 1, 0, 1, 2, 3, 100, 101]
    assert [row["restart"] for row in table] == ["true" if i in (4, 8) else "false" for i in range(10)]
    assert [int(row["sequence"]) for row in table] == list(range(10))


def test_outages_silence_a_link_or_a_gateway(profile: Profile) -> None:
    s = simulate(profile, plan({"interval": 2, "outage": [[100, 120]]}, {"interval": 2, "gateway": 2},
                               backhaul=[{"gateway": 2, "outage": [["1 min", "90 s"]]}, {"loss": 0}]))
    fates = Counter((row["link"], row["fate"]) for row in rows(s))
    assert fates["hollin/weir", "lost_air"] == 10 and fates["scar/upper-sluice", "lost_backhaul"] == 15
    assert fates["hollin/weir", "lost_backhaul"] == fates["scar/upper-sluice", "lost_air"] == 0


def test_the_error_rate_follows_the_time_of_day(profile: Profile) -> None:
    # Linear from 0 at 18:00 to 0.04 at 19:00: the second quarter of an hour has three times the errors.
    s = simulate(profile, make_plan({
        "start": "2026-03-01T17:00:00Z", "duration": "2 h", "link": [{
            "key": {"unit": 1}, "interval": 1, "kinds": ["level"],
            "bit_error_rate_by_time": [["18:00", 0], ["19:00", 0.04], ["19:01", 0]]}]}, "test"))
    wrong = np.array([int(row["wrong_bits"]) for row in rows(s)])
    quarters = wrong[3600:].reshape(4, 900).sum(axis=1)
    assert wrong[:3600].sum() == 0
    for quarter, mean in zip(quarters, (0.005, 0.015, 0.025, 0.035), strict=True):
        n = 900 * 120
        assert abs(quarter - n * mean) < 4.5 * (n * mean) ** 0.5


def test_the_pump_drive_disturbs_while_it_runs(profile: Profile) -> None:
    s = simulate(profile, plan({"interval": 2, "periodic": {"every": "10 ms", "bits": 6, "wrong": 1,
                                                            "during": [[100, 200]]}}))
    for row in rows(s):
        at = np.array(positions(row))
        if not 50 <= int(row["sequence"]) < 100:
            assert not len(at)
        else:               # 10 ms are 48 bits at 4800 bit/s: 120 bits hold 12 to 18 wrong ones
            assert 12 <= len(at) <= 18 and len(set((at % 48).tolist())) == 6


@pytest.mark.parametrize(("snap", "held"), [(64, 15), (63, 14), (49, 0), (30, 0), (1000, 15)])
def test_the_snap_length_cuts_frames(profile: Profile, snap: int, held: int) -> None:
    # By hand: 14 + 20 + 8 octets of headers and 7 of wrapper stand before an air frame of 15.
    s = simulate(profile, plan({"interval": 2, "frames": 5}, snap_length=snap))
    for row in rows(s):
        assert row["cut"] == ("false" if snap >= 64 else "true") and int(row["held_bytes"]) == held
        assert row["expected"] == ("intact" if held == 15 else "cut")
    record = s.captures[0][24:40]
    assert np.frombuffer(record, "<u4")[2:].tolist() == [min(64, snap), 64]


def test_fields_move_as_the_plan_says(profile: Profile) -> None:
    fields = {"depth": {"walk": 1.3, "step": 0.3, "low": 1.0, "high": 1.5}, "battery": {"ramp": [11.0, 13.0]},
              "temperature": {"constant": -4.5}, "contact": {"choice": ["closed"]},
              "setpoint": {"choice": [40, 60]}}
    table = rows(simulate(profile, plan({"interval": 2, "fields": fields})))
    level = [row for row in table if row["kind_of_message"] == "level"]
    gate = [row for row in table if row["kind_of_message"] == "gate"]
    assert len(level) == len(gate) == 150 and all(row["contact"] == "" for row in level)
    depth = [float(row["depth"]) for row in level]
    assert min(depth) >= 1.0 and max(depth) <= 1.5 and len(set(depth)) > 50
    assert max(abs(a - b) for a, b in zip(depth, depth[1:], strict=False)) <= 0.301
    assert {row["temperature"] for row in level} == {"-4.5"}
    assert {row["contact"] for row in gate} == {"closed"}
    assert {row["setpoint"] for row in gate} == {"40.0", "60.0"}
    battery = [float(row["battery"]) for row in level]
    assert battery == sorted(battery) and (battery[0], battery[-1]) == (11.0, 13.0)


def test_several_frames_share_a_datagram() -> None:
    profile = parse_profile(TWO_ROUND_ONE, "test")
    s = simulate(profile, make_plan({"duration": 100, "per_datagram": 3, "nanoseconds": True, "link": [
        {"gateway": g, "key": {"wrapper.channel": c}, "interval": 1, "first": c / 10, "bit_error_rate": 0.01,
         "jitter": 0.0, "payload": [0, 9]} for g in (4, 5) for c in (1, 2)]}, "test"))
    table = rows(s)
    datagrams = captured(s.captures[0])
    held: dict[int, dict[int, dict[str, str]]] = {}
    for row in table:
        held.setdefault(int(row["packet"]), {})[int(row["slot"])] = row
    numbers = Counter[int]()
    times = {packet: {row["captured"] for row in by_slot.values()} for packet, by_slot in held.items()}
    assert all(len(t) == 1 for t in times.values())
    for packet, (time,) in times.items():
        datagram = datagrams[packet]
        assert datagram is not None and abs(datagram.time - np.datetime64(time[:-1], "ns").astype(int)) < 1000
    assert sorted(held) == list(range(len(datagrams))) and len(table) == 400
    for packet, by_slot in sorted(held.items()):
        datagram = datagrams[packet]
        assert datagram is not None
        body, site = datagram.payload, int(by_slot[0]["gateway"])
        assert body[0] == 0x7E and body[1] == len(by_slot) and body[2] == site
        assert datagram.source == f"198.51.100.{10 + site}"
        assert int.from_bytes(body[-2:], "little") == numbers[site]
        numbers[site] += 1
        at = 3
        for slot in range(len(by_slot)):
            row = by_slot[slot]
            size = int.from_bytes(body[at + 1 : at + 3], "big") - 2
            assert f"{site}/{body[at]}" == row["link"] and size * 8 == int(row["air_bits"])
            air = np.unpackbits(np.frombuffer(body[at + 4 : at + 4 + size], np.uint8))[None].copy()
            air[0, positions(row)] ^= 1
            outcome = profile.chain.decode(air, None, {"mask": np.array([body[at + 3]])})
            assert outcome.reason[0] == 0
            assert np.packbits(outcome.message)[:2].tolist() == [int(row["count"]), int(row["value"])]
            at += 4 + size
        assert at == len(body) - 2
    assert Counter(len(v) for v in held.values())[3] >= 130


def test_a_cut_takes_the_last_frames_of_a_datagram() -> None:
    # By hand: 42 octets of headers, 3 before, then three times 4 and an air frame of 2 + 2: the frames
    # stand at 49 to 53, 57 to 61 and 65 to 69. A snap length of 59 leaves 4, 2 and none of them.
    s = simulate(parse_profile(TWO_ROUND_ONE, "test"), make_plan({
        "duration": 60, "per_datagram": 3, "snap_length": 59,
        "link": [{"gateway": 4, "key": {"wrapper.channel": 1}}]}, "test"))
    table = rows(s)
    assert [(row["held_bytes"], row["expected"]) for row in table] == [
        ("4", "intact"), ("2", "cut"), ("0", "cut")] * 10
    assert {row["cut"] for row in table} == {"true"}


def test_the_truth_is_a_documented_table(profile: Profile, rough: Simulation) -> None:
    columns = truth_columns(profile)
    header = rough.truth().partition("\n")[0].split(",")
    assert [c.name for c in columns] == header and columns[: len(TRUTH)] == TRUTH
    assert len(set(header)) == len(header) and all(c.meaning for c in columns)
    frame = rough.frames
    assert list(frame.columns) == header and str(frame["captured"].dtype) == "datetime64[ns, UTC]"
    text = rows(rough)
    for name in ("captured", "sent"):
        whole = [None if t != t else f"{t.isoformat()[:26]}" for t in frame[name]]
        assert whole == [row[name][:26] or None for row in text]
    assert frame["wrong_bits"].sum() == sum(int(row["wrong_bits"]) for row in text)


@settings(max_examples=20, deadline=None)
@given(st.floats(0, 1), st.floats(0, 1), st.floats(0, 1), st.integers(0, 20), st.integers(1, 5),
       st.integers(0, 99))
def test_any_plan_keeps_account_of_every_frame(loss: float, repeat: float, late: float, frames: int,
                                               split: int, seed: int) -> None:
    link = {"interval": 2, "frames": frames, "loss": loss, "repeat": repeat, "late": late,
            "bit_error_rate": 0.01}
    s = simulate("merrowdale", plan(link, seed=seed, split=split, backhaul=[{"loss": loss / 2}]))
    table = rows(s)
    fates = Counter(row["fate"] for row in table)
    assert len(table) == fates["captured"] + fates["lost_air"] + fates["lost_backhaul"]
    assert sum(row["repeated"] == "false" for row in table) == frames
    assert sum(len(captured(data)) for data in s.captures) == fates["captured"] and len(s.captures) == split
    assert all(row["wrong_bits"] == "0" for row in table if row["fate"] == "lost_air")


@pytest.mark.parametrize("name", ["ieee-802-15-4", "ieee-1815"])
def test_the_standards_profiles_can_be_simulated(name: str) -> None:
    profile = load_profile(name)
    key = {"source": 7, "destination": 1}
    s = simulate(profile, make_plan({"duration": 60, "link": [{"key": key, "payload": [0, 30]}]}, "test"))
    datagrams = captured(s.captures[0])
    assert len(datagrams) == 30 and len({len(d.payload) for d in datagrams if d}) > 5
    for row, d in zip(rows(s), datagrams, strict=True):
        assert d is not None and len(d.payload) * 8 == int(row["air_bits"])
        outcome = profile.chain.decode(np.unpackbits(np.frombuffer(d.payload, np.uint8))[None])
        assert outcome.reason[0] == 0 and outcome.wrong_bits[0] == 0


@pytest.mark.parametrize(("name", "found"), [("a.pcap.xz", ".xz"), ("a.pcapng", ".pcapng"),
                                             ("no/a.pcap", "no folder")])
def test_a_name_that_promises_something_else_is_refused(
        rough: Simulation, tmp_path: Path, name: str, found: str) -> None:
    with pytest.raises(UsageError) as caught:
        rough.write(tmp_path / name)
    assert found in caught.value.problems[0].found and not list(tmp_path.iterdir())


def test_the_truth_does_not_depend_on_how_it_is_made_ready(
        rough: Simulation, monkeypatch: pytest.MonkeyPatch) -> None:
    whole = rough.truth()
    monkeypatch.setattr(run, "ROWS_AT_ONCE", 7)
    assert rough.truth() == whole


def test_dots_in_a_name_stay(profile: Profile, tmp_path: Path) -> None:
    paths = simulate(profile, plan({"frames": 2})).write(tmp_path / "site.a.pcap")
    assert [p.name for p in paths] == ["site.a.pcap", "site.a.truth.csv"]
