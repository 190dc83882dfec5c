"""What an audit must find, worked out from the truth of a simulation by rules of its own.

No code of the program is used: the truth is read as text, and the rules are those of the manual.
"""

import csv
import io
from collections import defaultdict
from pathlib import Path

Row = dict[str, str]


def read_truth(text: str) -> list[Row]:
    return list(csv.DictReader(io.StringIO(text)))


def by_link(rows: list[Row]) -> dict[str, list[Row]]:
    links = defaultdict(list)
    for row in rows:
        links[row["link"]].append(row)
    return dict(links)


def captured(rows: list[Row]) -> list[Row]:
    return sorted((r for r in rows if r["fate"] == "captured"),
                  key=lambda r: (int(r["capture"]), int(r["packet"]), int(r["slot"])))


def lost_counters(rows: list[Row]) -> int:
    """Return how many sequence numbers between the first and last usable frame of a run never came.

    A run ends where the counter began again; what is lost before the first or behind the last usable
    frame of a run cannot be seen by its counters.
    """
    lost = 0
    run: list[Row] = []
    for row in [*sorted(rows, key=lambda r: (int(r["sequence"]), r["repeated"])), None]:
        if row is None or row["restart"] == "true":
            came = {int(r["sequence"]) for r in run if r["fate"] == "captured"}
            if came:
                lost += max(came) - min(came) + 1 - len(came)
            run = []
        if row is not None:
            run.append(row)
    return lost


def read_links(folder: Path) -> dict[str, Row]:
    with open(folder / "links.csv", newline="", encoding="utf-8") as file:
        return {row["link"]: row for row in csv.DictReader(file)}
