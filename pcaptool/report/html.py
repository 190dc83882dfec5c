"""report.html: the whole audit on one page that needs no network and no script."""

import os
from collections.abc import Mapping, Sequence
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING

from pcaptool.audit.table import MEANINGS
from pcaptool.report.terminal import verdict_text
from pcaptool.report.timeline import STATES, timeline
from pcaptool.table import time_text, write_whole

if TYPE_CHECKING:
    from jinja2 import Template

Row = Mapping[str, object]
MOST_PICTURES = 400     # links with a picture; the table has them all
MOST_GAPS = 20          # longest gaps shown


@cache
def template() -> "Template":
    """Return the compiled template."""
    from jinja2 import Environment, FileSystemBytecodeCache, PackageLoader, StrictUndefined

    folder = os.environ.get("NUMBA_CACHE_DIR")      # where the command line keeps what is compiled
    cache = FileSystemBytecodeCache(folder) if folder and os.access(folder, os.W_OK) else None
    environment = Environment(loader=PackageLoader("pcaptool.report"), autoescape=True, trim_blocks=True,
                              lstrip_blocks=True, undefined=StrictUndefined, bytecode_cache=cache)
    environment.filters |= {"count": count, "rate": rate, "when": when}
    return environment.get_template("report.html.j2")


def write_html(path: Path, summary: dict[str, object], links: Sequence[Row], captures: Sequence[Row],
               intervals: Sequence[Row], gaps: Sequence[Row]) -> None:
    """Write the page; everything that comes from files is escaped by the template engine."""
    by_link: dict[object, list[Row]] = {}
    for row in intervals:
        by_link.setdefault(row["link"], []).append(row)
    begins, ends = ([int(str(row[key])) for row in intervals] for key in ("from", "to"))
    begin, end = (min(begins), max(ends) - 1) if begins else (0, 0)
    pictures = {row["link"]: timeline(by_link.get(row["link"], []), begin, end) for row in links[:MOST_PICTURES]}
    over = [row for row in links if str(row["verdict"]).startswith("over")]
    totals = summary["totals"]
    assert isinstance(totals, dict)
    longest = sorted(gaps, key=lambda g: -int(str(g["missing"])))[:MOST_GAPS]
    page = template().render(
        summary=summary, links=links, captures=captures, pictures=pictures, over=over, states=STATES,
        headline=verdict_text(str(summary["verdict"]), totals, len(over)), meanings=MEANINGS, gaps=longest,
        gaps_in_all=len(gaps))
    write_whole(path, page.encode())


def count(value: object) -> str:
    """Return a count with thin spaces, a dash when missing."""
    return "–" if value is None else f"{value:,}".replace(",", "\u2009")


def rate(value: object, digits: int = 3) -> str:
    """Return a figure with some significant digits, a dash when missing."""
    return "–" if value is None else f"{value:.{digits}g}"


def when(value: object) -> str:
    """Return a time to the millisecond, a dash when missing."""
    return "–" if value is None else time_text(int(str(value)))[:23].replace("T", " ")
