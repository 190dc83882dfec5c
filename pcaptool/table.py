"""Columns of the tables that pass between layers and reach the user, written once as data; and their CSV.

CSV is RFC 4180 with fixed columns and ``\n``: the same bytes everywhere, safe to open in a spreadsheet.
"""

import csv
import io
import os
from collections.abc import Iterable, Mapping, Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import NamedTuple


class Column(NamedTuple):
    """One documented column.

    dtype  a pyarrow type name (``int64``, ``string``, ``bool``, ``double`` ...), ``timestamp`` (ns since
           1970, UTC), or ``label``: a dictionary-encoded string of few distinct values
    unit   empty for a count or a name
    """

    name: str
    dtype: str
    unit: str
    meaning: str


# First characters by which a spreadsheet takes text for a formula, ASCII and full-width.
FORMULA = ("=", "+", "-", "@", "\t", "\r", "＝", "＋", "－", "＠")


def defused(text: str) -> str:
    """Return text that no spreadsheet runs: an apostrophe goes before what looks like a formula."""
    return "'" + text if text.startswith(FORMULA) else text


def time_text(ns: int) -> str:
    """Return a time as ISO 8601 in UTC with nanoseconds."""
    seconds, fraction = divmod(ns, 1_000_000_000)
    return f"{datetime.fromtimestamp(seconds, UTC):%Y-%m-%dT%H:%M:%S}.{fraction:09d}Z"


def cell(column: Column, value: object) -> str:
    """Return a value as the text of its cell; None is an empty cell."""
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if column.dtype == "timestamp" and isinstance(value, int):
        return time_text(value)
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        return f"{value:.9g}" if column.unit == "s" else f"{value:.6g}"
    return defused(str(value))


def csv_text(columns: Sequence[Column], rows: Iterable[Mapping[str, object]]) -> str:
    """Return a small table as CSV."""
    text = io.StringIO(newline="")
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow([c.name for c in columns])
    for row in rows:
        writer.writerow([cell(c, row[c.name]) for c in columns])
    return text.getvalue()


def write_whole(path: Path, data: bytes) -> None:
    """Write a file beside its place and move it there."""
    beside = path.with_name(path.name + ".part")
    beside.write_bytes(data)
    os.replace(beside, path)
