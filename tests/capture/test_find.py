"""Which files an argument names."""

import gzip
import os

import pytest
from building import pcap

from pcaptool.capture import find_captures, natural


@pytest.fixture
def site(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "a" / "deep").mkdir(parents=True)
    (tmp_path / "empty").mkdir()
    for name in ("a/day10.pcap", "a/day9.pcap", "a/deep/day1.pcapng.gz", "a/rotated.pcap17", "a/nameless"):
        (tmp_path / name).write_bytes(pcap([]))
    (tmp_path / "a/packed.bin").write_bytes(gzip.compress(pcap([])))
    (tmp_path / "a/notes.txt").write_text("valves")
    (tmp_path / "a/notes.txt.gz").write_bytes(gzip.compress(b"valves"))
    return tmp_path


def names(arguments):
    found, problems = find_captures(arguments)
    return [str(path) for path in found], problems


def test_a_folder_is_searched_downwards_by_name_and_content(site):
    assert names(["a"]) == (["a/day9.pcap", "a/day10.pcap", "a/deep/day1.pcapng.gz", "a/nameless", "a/packed.bin",
                             "a/rotated.pcap17"], [])


def test_patterns_are_expanded_and_files_counted_once(site):
    found, problems = names(["a/day*.pcap", "a/day9.pcap", str(site / "a" / "day10.pcap"), "a/**/*.gz"])
    assert problems == [] and len(found) == 4 and len({os.path.realpath(f) for f in found}) == 4


def test_a_file_that_is_named_is_taken_whatever_it_is(site):
    assert names(["a/notes.txt"]) == (["a/notes.txt"], [])


@pytest.mark.parametrize(("argument", "found"), [
    ("empty", "a folder without captures"), ("b/*.pcap", "nothing of that name"), ("b.pcap", "nothing of that name")])
def test_an_argument_that_gives_nothing_is_a_problem_and_the_others_are_kept(site, argument, found):
    paths, (problem,) = names([argument, "a/day9.pcap"])
    assert paths == ["a/day9.pcap"]
    assert (problem.file, problem.found) == (argument, found) and problem.expected and problem.fix


def test_natural_order():
    assert sorted(["x10", "x9", "x1y2", "x1"], key=natural) == ["x1", "x1y2", "x9", "x10"]
    assert sorted(["x\N{SUPERSCRIPT TWO}", "x" + "1" * 5000, "x2"], key=natural)[-1] == "x\N{SUPERSCRIPT TWO}"
