"""The audit of simulated captures finds every frame's state, every flipped bit, every lost counter again."""

import gzip
from pathlib import Path

import pandas as pd
import pytest
from truth import by_link, captured, lost_counters, read_links, read_truth

import pcaptool
from pcaptool.simulate import make_plan, simulate

FIXTURE = Path(__file__).parents[2] / "fixtures" / "merrowdale"


@pytest.fixture(scope="module")
def day(tmp_path_factory):
    out = tmp_path_factory.mktemp("day")
    audit = pcaptool.audit(FIXTURE, profile="merrowdale")
    audit.write(out)
    truth = read_truth(gzip.decompress((FIXTURE / "day.truth.csv.gz").read_bytes()).decode())
    yield audit, out, truth
    audit.close()


def frame_of(frames):
    """Frame table rows by (capture, packet, slot)."""
    number = {name: i for i, name in enumerate(sorted(frames["capture"].astype(str).unique()))}
    keys = zip(frames["capture"].astype(str).map(number), frames["packet"], frames["slot"], strict=True)
    return dict(zip(keys, frames.to_dict("records"), strict=True))


def test_every_captured_frame_is_in_the_frame_table_and_no_other(day):
    audit, _, truth = day
    expected = {(int(r["capture"]), int(r["packet"]), int(r["slot"])) for r in captured(truth)}
    assert set(frame_of(audit.frames)) == expected


def test_the_state_of_every_frame_is_right(day):
    audit, _, truth = day
    table = frame_of(audit.frames)
    for row in captured(truth):
        found = table[int(row["capture"]), int(row["packet"]), int(row["slot"])]
        if row["wrong_bits"] == "0":
            assert found["state"] == "intact", row
        else:
            assert found["state"] in ("corrected", "corrupted"), row


def test_every_flipped_bit_of_a_corrected_frame_is_found_where_it_was_flipped(day):
    audit, _, truth = day
    frames = audit.frames
    errors = audit.errors.groupby("frame")["position"].apply(list).to_dict()
    rows = dict(zip(frame_of(frames), range(len(frames)), strict=True))
    corrected = 0
    for row in captured(truth):
        key = int(row["capture"]), int(row["packet"]), int(row["slot"])
        i = rows[key]
        if frames["state"].iloc[i] == "corrected":
            corrected += 1
            flipped = [int(p) for p in row["positions"].split(";")]
            assert errors[i] == flipped, row
            assert frames["wrong_bits"].iloc[i] == len(flipped)
    assert corrected > 300


def test_a_frame_with_at_most_one_wrong_bit_a_codeword_is_corrected(day):
    """Hamming(12,8) corrects one error a word; the interleaver sends bit p of word w at place p * 10 + w."""
    audit, _, truth = day
    table = frame_of(audit.frames)
    seen = 0
    for row in captured(truth):
        if row["wrong_bits"] == "0":
            continue
        words = [int(p) % 10 for p in row["positions"].split(";")]
        if len(words) == len(set(words)):
            seen += 1
            assert table[int(row["capture"]), int(row["packet"]), int(row["slot"])]["state"] == "corrected", row
    assert seen > 300


def test_lost_counters_are_found_and_put_where_they_were_lost(day):
    _, out, truth = day
    links = read_links(out)
    for name, rows in by_link(truth).items():
        found = links[name]
        assert int(found["lost"]) == lost_counters(rows), name
        fates = {r["fate"] for r in rows}
        if "lost_backhaul" not in fates:
            assert int(found["lost_air"]) == int(found["lost"]), name
        elif "lost_air" not in fates:
            assert int(found["lost_backhaul"]) == int(found["lost"]), name
        assert found["lost_undecided"] == "0", name


def test_repeats_and_restarts_are_recognised(day):
    _, out, truth = day
    links = read_links(out)
    for name, rows in by_link(truth).items():
        heard = captured(rows)
        again = sum(1 for r in heard if r["repeated"] == "true" and any(
            o["sequence"] == r["sequence"] and o["repeated"] == "false" for o in heard))
        assert int(links[name]["repeated"]) == again, name
        assert int(links[name]["restarts"]) == sum(r["restart"] == "true" for r in rows), name


def test_message_fields_of_usable_frames_are_those_that_were_sent(day):
    audit, _, truth = day
    table = frame_of(audit.frames)
    for row in captured(truth):
        found = table[int(row["capture"]), int(row["packet"]), int(row["slot"])]
        if found["state"] not in ("intact", "corrected"):
            continue
        assert found["unit"] == row["unit"] and found["counter"] == int(row["counter"])
        for field in ("depth", "temperature", "battery", "position", "setpoint"):
            if row[field]:
                assert found[field] == pytest.approx(float(row[field])), (field, row)
            else:
                assert pd.isna(found[field]), (field, row)


def test_the_ledger_counts_frames_and_foreign_packets(day):
    audit, _, truth = day
    ledger = audit.summary["ledger"]
    assert ledger["frames"] == len(captured(truth))
    assert ledger["records"] == ledger["frames"] + 600          # foreign = 600 in day.toml
    assert ledger["damaged_bytes"] == 0


CASES = {
    "losses in runs": dict(loss=0.05, loss_burst=6),
    "independent errors": dict(bit_error_rate=0.004),
    "two-state bursts": dict(burst={"to_bad": 0.002, "to_good": 0.2, "wrong": 0.5}),
    "repeats and late frames": dict(repeat=0.05, late=0.03),
    "restart": dict(first_counter=150, restart=[{"at": "2000 s", "to": 0}]),
    "silence longer than the counter": dict(outage=[["500 s", "11000 s"]]),
    "silence of many turns": dict(outage=[["500 s", "26500 s"]]),
}


@pytest.mark.parametrize("name", CASES)
def test_losses_of_simulated_channels_are_exact(tmp_path, name):
    link = {"gateway": 1, "key": {"unit": 1}, "interval": "20 s", "kinds": ["level"], **CASES[name]}
    plan = make_plan({"seed": 11, "start": "2026-03-01T00:00:00Z", "duration": "8 h", "link": [link]}, "test")
    simulation = simulate("merrowdale", plan)
    simulation.write(tmp_path / "a.pcap")
    audit = pcaptool.audit(tmp_path / "a.pcap", profile="merrowdale")
    audit.write(tmp_path / "out")
    audit.close()
    rows = by_link(read_truth(simulation.truth()))["hollin/weir"]
    found = read_links(tmp_path / "out")
    lost = sum(int(row["lost"] or 0) for row in found.values())
    usable_or_heard = lost_counters(rows)
    assert lost == usable_or_heard
    assert int(found["hollin/weir"]["lost_air"]) == lost
    if "outage" in name or "silence" in name:
        with open(tmp_path / "out" / "gaps.csv", encoding="utf-8") as file:
            assert ",time\n" in file.read()
