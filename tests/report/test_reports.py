"""Report files: safe in spreadsheets, browsers and terminals, whole or not there."""

import csv
import io
import re
from html.parser import HTMLParser

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from pcaptool.audit.table import MEANINGS
from pcaptool.links.table import LINKS
from pcaptool.report.frames_csv import frames_to_csv
from pcaptool.report.html import write_html
from pcaptool.report.terminal import ledger_text, links_text, verdict_text, visible
from pcaptool.report.timeline import timeline
from pcaptool.table import Column, csv_text, defused, time_text, write_whole

HOSTILE = '<script>alert("x")</script>&\x1b[31m'
HOUR = 3600 * 10**9


def link(name, **values):
    row = {c.name: 0 for c in LINKS} | {"link": name, "profile": "p", "verdict": "within limits", "headroom_mean": 0.9,
                                        "headroom_worst": 0.0, "bit_error_rate": 1e-5, "lost_percent": 0.1,
                                        "lost_low": 0.05, "lost_high": 0.2, "corrupted_percent": 0.0,
                                        "corrupted_low": 0.0, "corrupted_high": 0.1, "longest_gap_s": 40.0}
    return row | values


def interval(name, hour, **values):
    return {"link": name, "from": hour * HOUR, "to": (hour + 1) * HOUR, "intact": 170, "corrected": 5, "corrupted": 2,
            "short": 1, "lost": 3, "headroom_worst": 0.25} | values


def page(tmp_path, links, intervals, gaps=(), name="c.pcap"):
    ledger = dict.fromkeys(MEANINGS, 1) | {"records": 8, "damaged_bytes": 0}
    summary = {"verdict": "limit exceeded", "version": "0", "from": None, "to": None,
               "profiles": [{"name": name, "title": name, "file": name, "sha256": "0", "basis": name,
                             "forwards": "all"}],
               "totals": {"links": len(links), "heard": 1, "corrected": 0}, "ledger": ledger,
               "notes": [f"{name}: note"], "problems": [], "caution": "A diagnostic aid, no safety function."}
    captures = [{"capture": name, "format": "pcap", "compression": "", "records": 8, "frames": 1, "first_time": None,
                 "last_time": HOUR, "drops": None, "damage": name, "sha256": "ab"}]
    write_html(tmp_path / "r.html", summary, links, captures, intervals, gaps)
    return (tmp_path / "r.html").read_text(encoding="utf-8")


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@x", "\tx", "\rx", "＝1"])
def test_text_that_a_spreadsheet_would_run_is_defused(text):
    columns = (Column("a", "string", "", ""), Column("n", "int64", "", ""))
    cells = next(csv.reader(io.StringIO(csv_text(columns, [{"a": text, "n": -5}]).split("\n", 1)[1])))
    assert cells == ["'" + text.replace("\r", "\\r"), "-5"]


def test_csv_by_hand():
    columns = (Column("s", "string", "", ""), Column("t", "timestamp", "UTC", ""), Column("d", "double", "%", ""),
               Column("b", "bool", "", ""))
    rows = [{"s": 'a,"b"', "t": 1_500_000_001, "d": 1 / 3, "b": True}, dict.fromkeys("stdb")]
    assert csv_text(columns, rows) == 's,t,d,b\n"a,""b""",1970-01-01T00:00:01.500000001Z,0.333333,true\n,,,\n'
    assert time_text(1772323200 * 10**9) == "2026-03-01T00:00:00.000000000Z"


def test_a_file_is_replaced_whole(tmp_path):
    path = tmp_path / "a"
    write_whole(path, b"old")
    write_whole(path, b"new")
    assert path.read_bytes() == b"new" and len(list(tmp_path.iterdir())) == 1


def test_the_frame_table_as_csv_is_defused(tmp_path):
    table = pa.table({"capture": pa.array(["=x", "b", None]).dictionary_encode(), "n": [1, -2, None],
                      "time": pa.array([0, 1, 2], pa.timestamp("ns", "UTC"))})
    pq.write_table(table, tmp_path / "f.parquet")
    frames_to_csv(tmp_path / "f.parquet", tmp_path / "f.csv")
    rows = list(csv.reader(io.StringIO((tmp_path / "f.csv").read_text())))
    assert [r[0] for r in rows] == ["capture", "'=x", "b", ""] and [r[1] for r in rows[1:]] == ["1", "-2", ""]
    assert rows[2][2] == "1970-01-01T00:00:00.000000001Z"


class Tags(HTMLParser):
    def __init__(self):
        super().__init__()
        self.tags, self.texts, self.values = [], [], []

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.values += [value or "" for _, value in attrs]

    def handle_data(self, data):
        self.texts.append(data)


def test_everything_from_files_is_escaped(tmp_path):
    text = page(tmp_path, [link(HOSTILE, verdict=f"over limit: {HOSTILE}")], [interval(HOSTILE, 1)], name=HOSTILE)
    tags = Tags()
    tags.feed(text)
    assert "script" not in tags.tags
    assert any('<script>alert("x")</script>&' in t for t in tags.texts)


def test_the_page_needs_no_network_and_no_script(tmp_path):
    text = page(tmp_path, [link("a")], [interval("a", 1)])
    assert not re.search(r"(src|href)=\"(?!#)", text) and "url(http" not in text and "<script" not in text
    assert "diagnostic aid, no safety function" in text


def test_what_is_missing_shows_as_a_dash_and_never_as_0(tmp_path):
    text = page(tmp_path, [link("a", lost=None, lost_air=None, repeated=None, late=None, restarts=None)], [])
    row = re.search(r"<td class=\"t\">a</td>.*?</tr>", text, re.S)[0]
    assert row.count("–") >= 5
    assert "unknown" in text        # drops of a capture that cannot tell


def test_hundreds_of_links_stay_small(tmp_path):
    links = [link(f"l/{i}") for i in range(300)]
    intervals = [interval(f"l/{i}", h) for i in range(300) for h in range(200)]
    assert len(page(tmp_path, links, intervals)) < 15_000_000


def test_bars_of_a_timeline_stand_for_every_frame():
    picture = timeline([interval("a", 0), interval("a", 5, intact=0, corrected=0, corrupted=0, short=0, lost=40,
                                                   headroom_worst=None)], 0, 6 * HOUR - 1)
    assert picture is not None and picture.most == 181
    heights = [float(h) for h in re.findall(r"v([\d.]+)", picture.paths["lost"])]
    assert heights == pytest.approx([84 * 3 / 181, 84 * 40 / 181], abs=0.01)
    assert picture.headroom == f"M44.0 {8 + 84 * 0.75:.1f}h{916 / 6 * 0.92:.1f}"


def test_control_characters_never_reach_a_terminal():
    assert visible("a\x1b[31m\u202eb") == "a\\x1b[31m\\x202eb"
    assert "\x1b" not in links_text([link(HOSTILE)])


def test_terminal_tables_keep_80_columns():
    text = links_text([link("x" * 200, heard=123_456_789, lost=1234), link("b", verdict="over limit: " + "y" * 200)])
    assert all(len(line) <= 80 for line in text.splitlines())
    ledger = dict.fromkeys(MEANINGS, 10**9) | {"records": 8 * 10**9, "damaged_bytes": 5}
    assert all(len(line) <= 80 for line in ledger_text(ledger).splitlines())


def test_verdicts_in_words():
    assert verdict_text("limit exceeded", {"links": 5}, 2) == "Limit exceeded on 2 of 5 links."
    assert verdict_text("within limits", {"links": 1}, 0) == "Within limits: 1 link."
    assert verdict_text("no frames", {"links": 0}, 0).startswith("No frames")


def test_defusing_leaves_ordinary_text_alone():
    assert defused("hollin/weir") == "hollin/weir" and defused("") == ""
