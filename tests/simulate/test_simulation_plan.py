"""Plans: what they say, and every problem of one in a single run."""

from pathlib import Path
from typing import Any

import pytest

from pcaptool.problem import Problem, UsageError
from pcaptool.profile import load_profile
from pcaptool.simulate import Plan, even_plan, load_plan, make_plan, simulate
from pcaptool.simulate.check import plan_problems

WRONG_IN_ITSELF = '''
sed = 3
start = "2026-13-01"
duration = "24 hours"
split = 0
nanoseconds = 1
backhaul = [{ gatway = 2, loss = 1.5 }]
[[link]]
key = { unit = "weir" }
bit_error = 0.1
interval = 0
outage = [[1, "2 min", 3]]
bit_error_rate_by_time = [["25:00", 0.1]]
restart = [{ at = -1, too = 3 }]
fields = { depth = { walk = 1, constant = 2 }, battery = { walkk = 3 }, contact = { constant = true } }
burst = { to_bad = 0.1, to_good = "x" }
'''
PLACES = {
    "sed": "seed", "start": "2026-03-01", "duration": '"6 h"', "split": '"6 h"',
    "nanoseconds": "true or false", "backhaul[0].gatway": "gateway", "backhaul[0].loss": "at most 1",
    "link[0].key.unit": "a whole number", "link[0].bit_error": "bit_error_rate",
    "link[0].interval": "more than 0", "link[0].outage[0]": "2 entries",
    "link[0].bit_error_rate_by_time[0][0]": '"17:30"', "link[0].restart[0].at": "at least 0",
    "link[0].restart[0].too": "to", "link[0].fields.depth": "exactly one",
    "link[0].fields.battery.walkk": "walk",
    "link[0].fields.contact.constant": "names", "link[0].burst.to_good": "a number",
}


def problems_of(values: dict[str, Any], profile: str = "merrowdale") -> dict[str, Problem]:
    with pytest.raises(UsageError) as caught:
        simulate(profile, make_plan(values, "test"))
    return {p.place: p for p in caught.value.problems}


def test_all_problems_of_a_file_are_told_at_once(tmp_path: Path) -> None:
    path = tmp_path / "wrong.toml"
    path.write_text(WRONG_IN_ITSELF)
    with pytest.raises(UsageError) as caught:
        load_plan(path)
    found = {p.place: p for p in caught.value.problems}
    assert set(found) == set(PLACES) and len(caught.value.problems) == len(PLACES)
    for place, word in PLACES.items():
        assert word in found[place].expected + found[place].fix and found[place].file == "wrong.toml"
    assert found["sed"].found == "an unknown key" and found["sed"].fix == "write seed"
    assert found["link[0].bit_error"].fix == "write bit_error_rate"
    assert found["nanoseconds"].found == "1" and found["start"].found == "text '2026-13-01'"


def test_all_problems_with_a_profile_are_told_at_once() -> None:
    found = problems_of({
        "per_datagram": 2, "backhaul": [{"gateway": 2, "loss": 0.9, "loss_burst": 2}, {"gateway": 2}],
        "link": [
            {"key": {"unti": 1, "unit": 300, "count": 3, "wrapper.mark": 1}, "gateway": 256,
             "kinds": ["levle"], "first_counter": 256,
             "fields": {"depth": {"constant": 70}, "contact": {"choice": ["opn"]},
                        "unit": {"constant": 1}, "wrapper.size": {"constant": 4}}},
            {"payload": [3, 1], "loss": 0.9, "loss_burst": 2, "restart": [{"at": 3, "to": 999}],
             "outage": [[5, 5]], "periodic": {"every": "0.1 ms", "bits": 1, "during": [[4, 3]]}}]})
    fixes = {place: problem.fix for place, problem in found.items()}
    assert fixes | {
        "link[0].key.unti": "write unit", "link[0].kinds[0]": "write level",
        "link[0].fields.contact": "write open",
        "link[1].payload": "write [1, 3]", "backhaul[0].loss": "set loss_burst to 9 or more",
        "link[0].key.count": "remove it; the link counts, from first_counter"} == fixes
    assert set(fixes) == {
        "per_datagram", "backhaul[0].loss", "backhaul[1].gateway", "link[0].key.unti", "link[0].key.unit",
        "link[0].key.count", "link[0].key.wrapper.mark", "link[0].gateway", "link[0].kinds[0]",
        "link[0].first_counter", "link[0].fields.depth", "link[0].fields.contact", "link[0].fields.unit",
        "link[0].fields.wrapper.size", "link[1].payload", "link[1].loss", "link[1].restart[0].to",
        "link[1].outage[0]", "link[1].periodic.every", "link[1].periodic.during[0]"}
    assert found["link[0].fields.depth"].expected == "0 to 65.535 m, what the field holds"


def test_links_must_differ_and_time_must_end() -> None:
    twice = problems_of({"link": [{"key": {"unit": 1}, "gateway": 2},
                                  {"key": {"unit": 1, "wrapper.gateway": 2}}]})
    assert twice["link[1].key"].found == "link scar/weir, which link[0] is too"
    late = problems_of({"start": "2105-06-01", "duration": "366 d",
                        "link": [{"key": {"unit": 1}, "interval": 60}]})
    assert "32-bit" in late["duration"].expected
    many = problems_of({"duration": "366 d", "link": [{"key": {"unit": 1}, "interval": "10 ms"}]})
    assert "5,000,000" in many["duration"].expected


@pytest.mark.parametrize(("data", "found"), [(b"a = [", "TOML"), (b"\xff", "UTF-8"), (None, "a plan")])
def test_a_file_that_is_no_plan(tmp_path: Path, data: bytes | None, found: str) -> None:
    path = tmp_path / "plan.toml"
    if data is not None:
        path.write_bytes(data)
    with pytest.raises(UsageError) as caught:
        load_plan(path)
    assert found in caught.value.problems[0].expected


@pytest.mark.parametrize(("start", "ns"), [
    ("2026-03-01T06:00:00", 1_772_344_800), ("2026-03-01T06:00:00+01:00", 1_772_341_200),
    ("2026-03-01", 1_772_323_200)])
def test_times_are_utc_unless_they_say_otherwise(start: str, ns: int) -> None:
    assert make_plan({"start": start, "link": [{}]}, "test").start_ns == ns * 10**9


@pytest.mark.parametrize(("split", "files", "seconds"), [(1, 1, 86400), (4, 4, 21600), ("6 h", 4, 21600),
                                                         ("7 h", 4, 25200), ("2 d", 1, 172800)])
def test_captures_are_split_by_number_or_by_time(split: int | str, files: int, seconds: int) -> None:
    plan = make_plan({"duration": "24 h", "split": split, "link": [{}]}, "test")
    assert plan.capture_files == (files, seconds * 10**9)


def test_a_plan_from_a_few_figures() -> None:
    plan = even_plan(load_profile("merrowdale"), links=3, frames=7, interval=0.3, link={"loss": 0.0},
                     rest={"seed": 5})
    assert isinstance(plan, Plan) and plan.seed == 5
    assert [(k.key, k.gateway) for k in plan.link] == [({"unit": 1}, 1), ({"unit": 2}, 2), ({"unit": 3}, 1)]
    s = simulate("merrowdale", plan)
    assert len(s.sent) == 21 and {k: int((s.sent.link == k).sum()) for k in range(3)} == {0: 7, 1: 7, 2: 7}
    alone = even_plan(load_profile("ieee-1815"), links=2, frames=1, interval=1, link={}, rest={})
    assert [k.key for k in alone.link] == [{"source": 1, "destination": 1}, {"source": 2, "destination": 2}]


@pytest.mark.parametrize(("links", "link", "place"), [(256, {}, "links"), (9, {"loss": 2}, "loss"),
                                                      (2, {"burst": {"to_bad": 1}}, "burst.to_good")])
def test_problems_of_figures_are_told_once(links: int, link: dict[str, Any], place: str) -> None:
    with pytest.raises(UsageError) as caught:
        even_plan(load_profile("merrowdale"), links=links, frames=1, interval=1, link=link, rest={})
    assert [p.place for p in caught.value.problems] == [place]


def test_a_payload_that_fits_the_chain_is_named():
    """RS(255,223), depth 5: 1115 octets, without the check 2 and the header's 6."""
    plan = make_plan({"link": [{"key": {"spacecraft": 1, "channel": 1}}]}, "t")
    found = plan_problems(load_profile("ccsds-tm"), plan, "t")
    assert [p.fix for p in found if p.place.endswith("payload")] == ["set payload = [1107, 1107]"]


def test_streams_are_not_simulated_and_that_is_said():
    found = plan_problems(load_profile("ccsds-tm-convolutional"), make_plan({"link": [{}]}, "t"), "t")
    assert [(p.place, p.found) for p in found] == [("wrapper.carries", "'stream'")]
