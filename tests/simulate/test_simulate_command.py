"""The command ``pcaptool simulate``."""

from pathlib import Path

import pytest
from click.testing import CliRunner
from simulated import captured, truth_of

from pcaptool.cli.simulate import simulate


def run(*words: str) -> tuple[int, str, str]:
    """Return (exit status, stdout, stderr)."""
    result = CliRunner().invoke(simulate, list(words))
    return result.exit_code, result.stdout, result.stderr


def test_options_reach_the_simulation(tmp_path: Path) -> None:
    out = tmp_path / "demo.pcap"
    status, text, errors = run(
        "merrowdale", "--out", str(out), "--links", "2", "--frames", "400", "--loss", "0.1",
        "--repeat", "0.05",
        "--burst", "0.001,0.05,0.5", "--restart", "300:77", "--backhaul-loss", "0.05", "--late", "0.05",
        "--foreign", "4", "--split", "5 min", "--start", "2026-05-01T12:00:00Z", "--seed", "3",
        "--byte-order", "big", "--nanoseconds", "--late-places", "4")
    truth = tmp_path / "demo.truth.csv"
    captures = [tmp_path / f"demo-{i:02d}.pcap" for i in (1, 2, 3)]
    assert (status, errors) == (0, "") and text.split() == [*map(str, captures), str(truth)]
    table = truth_of(truth.read_text())
    assert {row["fate"] for row in table} == {"captured", "lost_air", "lost_backhaul"}
    assert {row["link"] for row in table} == {"hollin/weir", "scar/upper-sluice"}
    assert [row["counter"] for row in table if row["restart"] == "true"] == ["77", "77"]
    for flag in ("repeated", "late"):
        assert any(row[flag] == "true" for row in table)
    assert any(int(row["wrong_bits"]) > 2 for row in table)
    assert table[0]["sent"].startswith("2026-05-01T12:00:00.")
    assert captures[0].read_bytes()[:4] == bytes.fromhex("a1b23c4d")
    packets = sum(len(captured(path.read_bytes())) for path in captures)
    assert packets == 4 + sum(row["fate"] == "captured" for row in table)


def test_a_plan_and_its_seed(tmp_path: Path) -> None:
    plan = tmp_path / "plan.toml"
    plan.write_text('seed = 1\nduration = 60\n[[link]]\nkey = { unit = 3 }\nbit_error_rate = 0.1\n')
    made = []
    for name, more in (("a", ()), ("b", ("--seed", "1")), ("c", ("--seed", "2"))):
        out = tmp_path / f"{name}.pcap"
        assert run("merrowdale", "-o", str(out), "--plan", str(plan), *more)[0] == 0
        made.append(out.read_bytes())
    assert made[0] == made[1] != made[2]


@pytest.mark.parametrize(("words", "found"), [
    (("merowdale",), "write merrowdale"), (("merrowdale", "--loss", "2"), "--loss"),
    (("merrowdale", "--burst", "0.1"), "three or four numbers"),
    (("merrowdale", "--restart", "9:1.5"), "900:128"),
    (("merrowdale", "--start", "noon"), "options: start: found text 'noon'"),
    (("merrowdale", "--plan", "none.toml"), "none.toml: found No such file"),
    (("merrowdale", "--plan", "none.toml", "--loss", "0.1"), "found also --loss"),
    (("merrowdale", "--split", "0"), "options: split"), (("merrowdale", "--links", "256"), "options: links"),
])
def test_wrong_usage_is_status_2_and_writes_nothing(
        tmp_path: Path, words: tuple[str, ...], found: str) -> None:
    status, text, errors = run(*words, "--out", str(tmp_path / "a.pcap"))
    assert (status, text) == (2, "") and found in errors and "Traceback" not in errors
    assert not list(tmp_path.iterdir())


def test_the_plan_in_the_help_can_be_run(tmp_path: Path) -> None:
    text = run("--help")[1]
    lines = [line.strip() for line in text.splitlines()]
    first = next(i for i, line in enumerate(lines) if line.startswith("seed "))
    plan = tmp_path / "day.toml"
    plan.write_text("\n".join(lines[first : lines.index("Options:")]), encoding="utf-8")
    status, text, errors = run("merrowdale", "--out", str(tmp_path / "day.pcap"), "--plan", str(plan))
    assert (status, errors) == (0, "") and len(text.split()) == 5
