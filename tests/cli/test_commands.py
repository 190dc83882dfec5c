"""The command line: text, exit status, and where output goes."""

import json
import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

from pcaptool.cli import COMMANDS, cli

FIXTURES = Path(__file__).parents[2] / "fixtures"
DAY = str(FIXTURES / "merrowdale")
STANDARD = str(FIXTURES / "standard")


def run(*arguments):
    return CliRunner().invoke(cli, list(arguments))


def process(*arguments, **options):
    return subprocess.run([sys.executable, "-m", "pcaptool", *arguments], capture_output=True, text=True, timeout=120,
                          **options)


@pytest.mark.parametrize("command", [[], *([name] for name in COMMANDS), ["profile", "check"], ["profile", "show"]])
def test_help_fits_a_terminal_of_80_columns_and_shows_an_example(command):
    result = run(*command, "--help")
    assert result.exit_code == 0
    assert all(len(line) <= 80 for line in result.output.splitlines()), result.output
    if len(command) < 2:
        assert "pcaptool " in result.output.replace("Usage: ", "")


def test_an_audit_over_a_limit_ends_with_1_and_names_the_report(tmp_path):
    result = run("audit", DAY, "-p", "merrowdale", "-o", str(tmp_path / "out"), "-q")
    assert result.exit_code == 1
    assert "Limit exceeded on 3 of" in result.stdout and "hollin/pump-house" in result.stdout
    assert f"Open {tmp_path / 'out' / 'report.html'}" in result.stderr
    assert all(len(line) <= 80 for line in result.stdout.splitlines())
    names = {p.name for p in (tmp_path / "out").iterdir()}
    assert names == {"captures.csv", "errors.parquet", "frames.parquet", "gaps.csv", "intervals.csv", "links.csv",
                     "report.html", "summary.json"}
    assert [p.name for p in tmp_path.iterdir()] == ["out"]      # nothing temporary is left


def test_json_is_all_that_stdout_holds():
    result = run("audit", STANDARD, "--json", "-q")
    summary = json.loads(result.stdout)
    assert summary["verdict"] == "no limits" and {p["name"] for p in summary["profiles"]} == {
        "ieee-1815", "ieee-802-15-4"}
    assert result.exit_code == 0


def test_standard_captures_give_the_counts_of_their_author():
    counts = json.loads((FIXTURES / "standard" / "counts.json").read_text())
    for name, expected in counts.items():
        totals = json.loads(run("audit", f"{STANDARD}/{name}.pcap", "-p", name, "--json", "-q").stdout)["totals"]
        for key in expected.keys() & totals.keys():
            assert totals[key] == expected[key], (name, key)


def test_frames_as_csv(tmp_path):
    run("audit", STANDARD, "-o", str(tmp_path), "--frames", "csv", "-q")
    lines = (tmp_path / "frames.csv").read_text().splitlines()
    assert lines[0].startswith("capture,packet,slot,time,profile,link,counter,state,arrival,reason,verified,")
    counts = json.loads((FIXTURES / "standard" / "counts.json").read_text())
    assert len(lines) == 1 + sum(c["heard"] for c in counts.values())
    assert not (tmp_path / "frames.parquet").exists()


def test_a_link_and_a_time_can_be_picked(tmp_path):
    result = run("audit", DAY, "-p", "merrowdale", "--link", "scar/*", "--from", "2026-03-01T06:00",
                 "--until", "2026-03-01T07:00Z", "--json", "-q")
    summary = json.loads(result.stdout)
    assert [row["link"] for row in summary["links"]] == ["scar/spillway"]
    assert 170 <= summary["totals"]["heard"] <= 180     # a frame every 20 s, some lost
    assert any("outside the time asked for" in note for note in summary["notes"])


@pytest.mark.parametrize(("arguments", "message"), [
    (["audit", "nowhere/"], "nothing of that name"),
    (["audit", DAY, "-p", "merowdale"], "write merrowdale"),
    (["audit", DAY, "-p", "merrowdale", "--from", "noon"], "an ISO 8601 time"),
    (["audit", DAY, "-p", "merrowdale", "--link", "tarn"], "no link" if False else "one of hollin/"),
    (["profile", "show", "nothing"], "one of"),
])
def test_wrong_usage_ends_with_2_and_says_what_to_do(arguments, message):
    result = run(*arguments, *(["-q"] if arguments[0] == "audit" else []))
    assert result.exit_code == 2 and message in result.stderr and "fix:" in result.stderr


def test_a_capture_that_is_none_ends_with_3(tmp_path):
    path = tmp_path / "a.pcap"
    path.write_bytes((FIXTURES / "standard" / "ieee-1815.pcap").read_bytes()[:-7])
    result = run("audit", str(path), "-p", "ieee-1815", "-q")
    assert result.exit_code == 3


def test_profile_check_and_list_and_schema():
    assert run("profile", "check", "merrowdale", "ieee-1815", "ieee-802-15-4").exit_code == 0
    assert "merrowdale" in run("profile", "list").output
    assert json.loads(run("profile", "schema").output)["title"] == "pcaptool profile"
    shown = run("profile", "show", "merrowdale").output
    assert "rate 0.533" in shown and all(len(line) <= 80 for line in shown.splitlines())


def test_a_closed_pipe_is_no_error():
    command = f"{sys.executable} -m pcaptool profile schema | head -n 1; echo ${{PIPESTATUS[0]}}"
    done = subprocess.run(["bash", "-c", command], capture_output=True, text=True, timeout=60)
    assert done.stdout.splitlines() == ["{", "0"] and done.stderr == ""


def test_the_process_ends_with_the_status_of_its_command():
    assert process("profile", "show", "nothing").returncode == 2
    assert process("--version").stdout.startswith("pcaptool ")


@pytest.mark.parametrize("shell", ["bash", "zsh", "fish"])
def test_completion_scripts(shell):
    result = run("--completion", shell)
    assert result.exit_code == 0 and "_PCAPTOOL_COMPLETE" in result.output


def test_help_imports_nothing_heavy():
    code = "import sys, pcaptool.cli; pcaptool.cli.cli.main(['--help'], standalone_mode=False); " \
           "print([m for m in ('numpy', 'numba', 'pandas', 'pyarrow', 'pydantic') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60)
    assert done.stdout.splitlines()[-1] == "[]"
