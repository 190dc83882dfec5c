"""Tables and verdict for a terminal 80 columns wide."""

import unicodedata
from collections.abc import Mapping, Sequence

from pcaptool.audit.table import MEANINGS

Row = Mapping[str, object]
BOLD, DIM, PLAIN = "\x1b[1m", "\x1b[2m", "\x1b[0m"


def visible(text: str) -> str:
    """Return text from a file with control and direction characters made visible."""
    return "".join(f"\\x{ord(c):02x}" if unicodedata.category(c) in ("Cc", "Cf", "Cs", "Zl", "Zp") else c
                   for c in text)


def _number(value: object) -> str:
    return "–" if value is None else f"{value:,}".replace(",", " ") if isinstance(value, int) else f"{value:.3g}"


def links_text(links: Sequence[Row], width: int = 80, colour: bool = False) -> str:
    """Return the table of links; what is missing shows as a dash."""
    heads = ("heard", "correctd", "corrupt", "short", "lost", "lost %", "headroom")
    keys = ("heard", "corrected", "corrupted", "short", "lost", "lost_percent", "headroom_mean")
    rows = [[_number(row[key]) for key in keys] for row in links]
    sizes = [max([len(h), *(len(r[j]) for r in rows)]) for j, h in enumerate(heads)]
    room = max(width - sum(sizes) - 2 * len(sizes) - 2, 8)
    names = [visible(str(row["link"])) for row in links]
    first = min(max([4, *(len(n) for n in names)]), room)
    lines = [f"  {'link':<{first}}" + "".join(f"  {h:>{s}}" for h, s in zip(heads, sizes, strict=True))]
    if colour:
        lines[0] = BOLD + lines[0] + PLAIN
    for row, name, cells in zip(links, names, rows, strict=True):
        mark = "!" if str(row["verdict"]).startswith("over") else " "
        shown = name if len(name) <= first else name[: first - 1] + "…"
        line = f"{mark} {shown:<{first}}" + "".join(f"  {c:>{s}}" for c, s in zip(cells, sizes, strict=True))
        lines.append(BOLD + line + PLAIN if colour and mark == "!" else line)
        if mark == "!":
            lines += _wrapped(visible(str(row["verdict"])), width, "    ")
    return "\n".join(lines) + "\n"


def ledger_text(ledger: Mapping[str, int], width: int = 80) -> str:
    """Return the ledger: every record in one entry, and their sum."""
    shown = [(name, count, MEANINGS[name]) for name, count in ledger.items() if name in MEANINGS and count]
    shown.append(("records", ledger["records"], "in all; the entries add up to it"))
    if ledger.get("damaged_bytes"):
        shown.append(("damaged_bytes", ledger["damaged_bytes"], "bytes that are no record"))
    size = max(len(_number(count)) for _, count, _ in shown)
    lines = []
    for name, count, meaning in shown:
        line = f"  {name:<19}  {_number(count):>{size}}  {meaning}"
        lines.append(line if len(line) <= width else line[: width - 1] + "…")
    return "\n".join(lines) + "\n"


def verdict_text(verdict: str, totals: Mapping[str, int], over: int) -> str:
    """Return the verdict as one sentence."""
    links = f"{totals['links']} link{'s' * (totals['links'] != 1)}"
    if verdict == "no frames":
        return "No frames: no datagram fits a profile."
    if verdict == "limit exceeded":
        return f"Limit exceeded on {over} of {links}."
    return f"Within limits: {links}." if verdict == "within limits" else f"{links}; the profile sets no limits."


def _wrapped(text: str, width: int, indent: str) -> list[str]:
    import textwrap

    return textwrap.wrap(text, width, initial_indent=indent, subsequent_indent=indent + "  ")
