"""Columns of the tables that pass between layers and reach the user, written once as data; and their CSV.

CSV is RFC 4180 with fixed columns and ``\n``: the same bytes everywhere, safe to open in a spreadsheet.
"""

import csv
import io
import os
from collections.abc import Callable, Iterable, Mapping, Sequence
from datetime import UTC, datetime
from functools import lru_cache
from pathlib import Path
from typing import Any, NamedTuple


class Column(NamedTuple):
    """One documented column.

    dtype  a pyarrow type name (``int64``, ``string``, ``bool``, ``double`` ...), ``timestamp`` (ns since
           1970, UTC), or ``label``: a dictionary-encoded string of few distinct values
    unit   empty for a count or a name
    always there is a value in every row
    """

    name: str
    dtype: str
    unit: str
    meaning: str
    always: bool = False


# First characters by which a spreadsheet takes text for a formula, ASCII and full-width.
FORMULA = ("=", "+", "-", "@", "\t", "\r", "＝", "＋", "－", "＠")


@lru_cache(maxsize=65536)
def defused(text: str) -> str:
    """Return text that no spreadsheet runs: an apostrophe goes before what looks like a formula.

    A carriage return, which some readers take for the end of a row, is written as \\r.
    """
    text = "'" + text if text.startswith(FORMULA) else text
    return text.replace("\r", "\\r")


def time_text(ns: int) -> str:
    """Return a time as ISO 8601 in UTC with nanoseconds."""
    seconds, fraction = divmod(ns, 1_000_000_000)
    return f"{_second(seconds)}.{fraction:09d}Z"


@lru_cache(maxsize=4096)
def _second(seconds: int) -> str:
    return datetime.fromtimestamp(seconds, UTC).isoformat()[:19]


def _text_of(column: Column) -> Callable[[Any], str]:
    """Return what turns a value of a column, not None, into the text of its cell."""
    match column.dtype:
        case "timestamp":
            return time_text
        case "bool":
            return lambda value: "true" if value else "false"
        case "double" | "float":
            return "{:.9g}".format if column.unit == "s" else "{:.6g}".format
        case "string" | "label":
            return defused
    return str


def csv_text(columns: Sequence[Column], rows: Iterable[Mapping[str, object]]) -> str:
    """Return a small table as CSV; None is an empty cell."""
    text = io.StringIO(newline="")
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow([c.name for c in columns])
    makers = [(c.name, _text_of(c)) for c in columns]
    writer.writerows([["" if row[name] is None else make(row[name]) for name, make in makers] for row in rows])
    return text.getvalue()


def write_whole(path: Path, data: bytes) -> None:
    """Write a file beside its place and move it there."""
    beside = path.with_name(path.name + ".part")
    beside.write_bytes(data)
    os.replace(beside, path)
