"""One timeline picture per link: frames over time as stacked bars by state, and worst headroom.

States differ by pattern as well as by colour, so that the picture reads in black and white; one path
per state keeps it small.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime

Row = Mapping[str, object]
WIDTH, TOP, HEIGHT, LEFT = 960.0, 8.0, 84.0, 44.0
STATES = ("intact", "corrected", "corrupted", "short", "lost")
MOST_BARS = 200


@dataclass(frozen=True, slots=True)
class Timeline:
    """What the template draws: paths by state, headroom strokes, axis marks."""

    paths: dict[str, str]
    headroom: str
    marks: list[tuple[float, str]]
    most: int               # frames at the top of the axis
    caption: str            # span and bin width in words


def timeline(rows: Sequence[Row], begin: int, end: int) -> Timeline | None:
    """Return the timeline of one link's rows of intervals.csv, from begin to end (ns)."""
    if not rows:
        return None
    width = _int(rows[0]["to"]) - _int(rows[0]["from"])
    begin = begin // width * width
    bins = max((end - begin) // width + 1, 1)
    merge = -(-bins // MOST_BARS)
    bars = -(-bins // merge)
    counts = [[0] * bars for _ in STATES]
    worst: list[float | None] = [None] * bars
    for row in rows:
        b = (_int(row["from"]) - begin) // width // merge
        for k, state in enumerate(STATES):
            counts[k][b] += _int(row[state])
        low = row["headroom_worst"]
        if isinstance(low, float):
            known = worst[b]
            worst[b] = low if known is None else min(low, known)
    most = max(sum(column) for column in zip(*counts, strict=True)) or 1
    step = (WIDTH - LEFT) / bars
    paths = {}
    base = [0] * bars
    for state, column in zip(STATES, counts, strict=True):
        path = []
        for b, count in enumerate(column):
            if count:
                x, y = LEFT + b * step, TOP + HEIGHT * (1 - (base[b] + count) / most)
                path.append(f"M{x:.1f} {y:.2f}h{step * 0.92:.2f}v{HEIGHT * count / most:.2f}h{-step * 0.92:.2f}z")
                base[b] += count
        if path:
            paths[state] = "".join(path)
    return Timeline(paths, _level(worst, step), _marks(begin, begin + bins * width), most,
                    f"{_time(begin)} to {_time(begin + bins * width)} UTC, one bar for {_span(width * merge)}")


def _int(value: object) -> int:
    return int(value) if isinstance(value, int) else 0


def _level(worst: Sequence[float | None], step: float) -> str:
    """Return a short stroke for every bar that has a headroom; not joined, since bars are counts apart."""
    return "".join(f"M{LEFT + b * step:.1f} {TOP + HEIGHT * (1 - max(value, 0)):.1f}h{step * 0.92:.1f}"
                   for b, value in enumerate(worst) if value is not None)


def _time(ns: int) -> str:
    return f"{datetime.fromtimestamp(ns / 1e9, UTC):%Y-%m-%d %H:%M:%S}"


def _span(ns: int) -> str:
    for unit, name in ((86_400, "d"), (3600, "h"), (60, "min"), (1, "s")):
        if ns >= unit * 1_000_000_000:
            return f"{ns / unit / 1e9:g} {name}"
    return f"{ns / 1e6:g} ms"


STEPS = (1, 5, 10, 30, 60, 300, 600, 1800, 3600, 7200, 14400, 21600, 43200, 86400, 604800, 2419200)


def _marks(begin: int, end: int) -> list[tuple[float, str]]:
    """Return (x, label) of about six round times."""
    span = (end - begin) / 1e9
    step = next((s for s in STEPS if span / s <= 7), STEPS[-1]) * 1_000_000_000
    first = -(-begin // step) * step
    form = "%d %b" if step >= 86_400_000_000_000 else "%H:%M" if step >= 60_000_000_000 else "%H:%M:%S"
    return [(LEFT + (WIDTH - LEFT) * (t - begin) / (end - begin), f"{datetime.fromtimestamp(t / 1e9, UTC):{form}}")
            for t in range(first, end, step)]
