"""The summary of an audit: what summary.json holds and --json prints."""

import json
from pathlib import Path

from pcaptool import __version__
from pcaptool.audit import AuditResult
from pcaptool.table import time_text, write_whole

FORMAT = 1      # version of the layout of summary.json


def summary_of(result: AuditResult) -> dict[str, object]:
    """Return the summary; keys in a fixed order, nothing that depends on when or where it was made."""
    firsts = [int(str(c["first_time"])) for c in result.captures if c["first_time"] is not None]
    lasts = [int(str(c["last_time"])) for c in result.captures if c["last_time"] is not None]
    return {
        "format": FORMAT,
        "version": __version__,
        "verdict": result.verdict,
        "profiles": [{"name": p.name, "title": p.title, "sha256": p.sha256, "file": p.origin, "basis": p.basis,
                      "forwards": p.wrapper.forwards} for p in result.profiles],
        "from": time_text(min(firsts)) if firsts else None,
        "to": time_text(max(lasts)) if lasts else None,
        "totals": result.totals,
        "links": [{"link": r["link"], "verdict": r["verdict"]} for r in result.links],
        "limits": {p.name: {k: v for k, v in dict(p.limits).items() if v is not None} for p in result.profiles},
        "ledger": result.ledger,
        "captures": [{"capture": c["capture"], "sha256": c["sha256"], "size": c["size"], "records": c["records"],
                      "damaged_bytes": c["damaged_bytes"], "drops": c["drops"]} for c in result.captures],
        "notes": result.notes,
        "problems": [{"file": p.file, "place": p.place, "found": p.found, "expected": p.expected, "fix": p.fix}
                     for p in result.problems],
        "caution": CAUTION,
    }


CAUTION = ("A diagnostic aid, no safety function. Where a link commands machinery, local codes and licensed practice "
           "decide; nothing here shows that a link or a machine is safe.")


def write_summary(path: Path, summary: dict[str, object]) -> None:
    """Write summary.json."""
    write_whole(path, (json.dumps(summary, indent=2, ensure_ascii=False) + "\n").encode())
