"""Profiles: every problem told in one run, worked examples in both directions, schema and loader agree."""

import re
import tomllib

import jsonschema
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pcaptool.problem import ProfileError, UsageError
from pcaptool.profile import (
    bit_positions,
    check_profile,
    conflicts,
    decode_fields,
    encode_fields,
    load_profile,
    parse_profile,
    shipped_profiles,
)
from pcaptool.profile.describe import describe
from pcaptool.profile.schema import json_schema

GOOD = """format = 1
name = "t"
title = "t"
basis = "invented"
[carrier]
port = [5000]
[wrapper]
before = [ { name = "gateway", bytes = 1 }, { name = "size", bytes = 1 } ]
frame_bytes = "size"
[[coding]]
step = "crc"
standard = "ccsds"
[[coding]]
step = "hamming"
n = 12
k = 8
[message]
fields = [ { name = "unit", bits = 8 }, { name = "count", bits = 8 } ]
[link]
by = ["wrapper.gateway", "unit"]
[counter]
field = "count"
"""


def problems(text: str) -> list[tuple[str, str, str, str]]:
    with pytest.raises(ProfileError) as caught:
        parse_profile(text.encode(), "t.toml")
    assert all(p.file == "t.toml" for p in caught.value.problems)
    return [(p.place, p.found, p.expected, p.fix) for p in caught.value.problems]


def swap(old: str, new: str) -> str:
    assert old in GOOD
    return GOOD.replace(old, new, 1)


def test_a_good_profile_loads_with_its_defaults():
    p = parse_profile(GOOD.encode(), "t.toml")
    assert p.counter is not None and p.counter.modulo == 256 and p.counter.window == 16
    assert len(p.sha256) == 64 and p.origin == "t.toml"


WRONG = [
    (swap("k = 8", "k = 9"), "coding[1].k", "9",
     "8 (n = 12 needs 4 check bits, since 2**4 >= 12 + 1)", "set k = 8, or n = 13"),
    (swap('step = "hamming"', 'step = "haming"'), "coding[1].step", "'haming'", None, 'write step = "hamming"'),
    (swap("standard =", "standart ="), "coding[0].standart", "unknown key 'standart'", None, "write standard"),
    (swap("[5000]", "[70000]"), "carrier.port[0]", "a whole number 70000", "at most 65535", None),
    (swap("[5000]", '"5000"'), "carrier.port", "text '5000'", "an array", None),
    (swap("bytes = 1 }, {", 'bytes = "one" }, {'), "wrapper.before[0].bytes", "text 'one'", "a whole number", None),
    (swap('frame_bytes = "size"', 'frame_bytes = "sise"'), "wrapper.frame_bytes", "'sise'",
     "one of gateway, size", None),
    (swap('"unit"]', '"unitt"]'), "link.by[1]", "'unitt'", None, "write unit"),
    (swap('field = "count"', 'field = "counter"'), "counter.field", "'counter'", None, "write count"),
    (swap('field = "count"', 'field = "count"\nmodulo = 300'), "counter.modulo", "300",
     "at most 256 (count has 8 bits)", "set modulo = 256"),
    (swap('field = "count"', 'field = "count"\nwindow = 200'), "counter.window", "200", "at most half of 256", None),
    (swap('title = "t"\n', ""), "title", "nothing", "the key title", "set title"),
    (swap("format = 1", "format = 2"), "format", "a whole number 2", None, None),
    (swap('frame_bytes = "size"', "frame_bytes = 4"), "wrapper.frame_bytes", "4 bytes of air frame",
     "a size that the chain can undo", None),
    (swap('name = "count", bits = 8', 'name = "unit", bits = 8'), "message.fields", "2 fields named unit",
     "names that differ", "rename one"),
    (swap("[link]", "[extra]\nx = 1\n[link]"), "extra", "unknown key 'extra'", None, None),
]


@pytest.mark.parametrize(("text", "place", "found", "expected", "fix"), WRONG)
def test_each_kind_of_mistake_is_told(text, place, found, expected, fix):
    told = {p[0]: p for p in problems(text)}
    assert place in told
    assert told[place][1] == found
    assert expected is None or told[place][2] == expected
    assert fix is None or told[place][3] == fix


def test_a_problem_reads_as_the_manual_shows_it():
    with pytest.raises(ProfileError) as caught:
        parse_profile(swap("k = 8", "k = 9").encode(), "merrowdale.toml")
    assert str(caught.value) == (
        "merrowdale.toml: coding[1].k: found 9, expected 8 (n = 12 needs 4 check bits, since 2**4 >= 12 + 1)\n"
        "  fix: set k = 8, or n = 13")


def test_all_problems_come_in_one_run_in_the_order_of_the_file():
    text = (GOOD.replace("[5000]", "[0]").replace("k = 8", "k = 9").replace("bits = 8 }, {", "bits = 99 }, {")
            .replace('basis = "invented"', 'basis = 5'))
    assert [p[0] for p in problems(text)] == ["basis", "carrier.port[0]", "coding[1].k", "message.fields[0].bits"]


def test_toml_errors_name_the_line():
    place, found, expected, _ = problems("format = 1\nname = \n")[0]
    assert "line 2" in place and expected == "TOML"


@given(st.sampled_from(["", "[carrier]", "[wrapper]", "[message]", "[link]", "[counter]"]),
       st.from_regex(r"\Azz[a-z]{1,8}\Z"))
def test_an_unknown_key_anywhere_is_reported(section, key):
    line = f"{key} = 1\n"
    text = line + GOOD if not section else GOOD.replace(section + "\n", section + "\n" + line)
    assert any(f"unknown key '{key}'" == p[1] for p in problems(text))


@given(st.binary(max_size=60))
def test_garbage_is_a_profile_error_and_nothing_else(data):
    with pytest.raises(ProfileError):
        parse_profile(data, "x")


@pytest.mark.parametrize("name", shipped_profiles())
def test_shipped_profiles_pass_their_worked_examples(name):
    p = load_profile(name)
    assert p.name == name and p.example and check_profile(p) == []
    assert all(len(line) <= 80 for line in describe(p).splitlines())


def test_a_wrong_example_is_found_in_either_direction():
    text = load_profile("merrowdale").text
    wrong = parse_profile(text.replace("depth = 1.342", "depth = 1.343").encode(), "m.toml")
    assert [p.place for p in check_profile(wrong)] == ["example[0].gives.depth"]
    flipped = parse_profile(text.replace("13bb88", "13bb89", 1).encode(), "m.toml")
    assert "wrong bits" in check_profile(flipped)[0].found


def test_unknown_names_get_a_near_one():
    with pytest.raises(UsageError) as caught:
        load_profile("merrowdal")
    assert caught.value.problems[0].fix == "write merrowdale"


def test_the_schema_accepts_every_shipped_profile_and_refuses_unknown_keys():
    schema = json_schema()
    jsonschema.Draft202012Validator.check_schema(schema)
    validator = jsonschema.Draft202012Validator(schema)
    for path in shipped_profiles().values():
        assert list(validator.iter_errors(tomllib.loads(path.read_text("utf-8")))) == [], path.name
    raw = tomllib.loads(GOOD)
    assert validator.is_valid(raw)
    assert not validator.is_valid(raw | {"extra": 1})
    assert not validator.is_valid(raw | {"coding": [{"step": "crc", "widht": 3}]})


@pytest.mark.parametrize(("order", "offset", "bits", "positions"), [
    ("big", 0, 4, [0, 1, 2, 3]),
    ("big", 6, 4, [6, 7, 8, 9]),
    ("little", 0, 4, [4, 5, 6, 7]),             # low nibble of the first byte
    ("little", 4, 8, [12, 13, 14, 15, 0, 1, 2, 3]),   # low nibble of the second byte over the high of the first
])
def test_bit_positions_by_hand(order, offset, bits, positions):
    assert bit_positions(order, offset, bits) == positions


@given(st.integers(0, 255), st.integers(-8, 7), st.integers(0, 2**12 - 1))
def test_fields_encode_and_decode(a, b, c):
    text = swap("fields = [", 'order = "little"\nfields = [').replace(
        '{ name = "count", bits = 8 }', '{ name = "count", bits = 8 }, { name = "s", bits = 4, signed = true }, '
        '{ name = "w", bits = 12 }')
    p = parse_profile(text.encode(), "t.toml")
    values = {"unit": np.array([a]), "count": np.array([7]), "s": np.array([b]), "w": np.array([c])}
    found = decode_fields(p, encode_fields(p, values))
    assert {k: int(v[0]) for k, v in found.items()} == {"unit": a, "count": 7, "s": b, "w": c}


@pytest.mark.parametrize(("change", "clash"), [
    (("", ""), True),
    (("[5000]", "[5001]"), False),
    (("[5000]", '[5000]\nopening = "AA"'), True),
    (('bytes = 1 }, {', 'bytes = 1, must_be = 3 }, {'), True),
])
def test_profiles_that_claim_the_same_datagrams(change, clash):
    a = parse_profile(GOOD.encode(), "a.toml")
    b = parse_profile(GOOD.replace(*change).encode() if change[0] else GOOD.encode(), "b.toml")
    assert bool(conflicts([a, b])) == clash


def test_fixed_first_bytes_that_differ_tell_profiles_apart():
    a = parse_profile(swap("bytes = 1 }, {", "bytes = 1, must_be = 3 }, {").encode(), "a.toml")
    b = parse_profile(swap("[5000]", '[5000]\nopening = "04"').encode(), "b.toml")
    assert conflicts([a, b]) == []


def test_the_manual_names_every_step_and_every_section():
    from pcaptool.coding import STEPS
    from pcaptool.profile.load import profiles_folder

    manual = (profiles_folder() / "README.md").read_text("utf-8")
    for name in STEPS:
        assert f"- **{name}**:" in manual
    for name in shipped_profiles():
        assert f"`{name}`" in manual
    for section in re.findall(r"^\[+(\w+)", GOOD, re.M):
        assert f"[{section}]" in manual
