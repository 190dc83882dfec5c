"""Find captures: files, folders searched downwards, and patterns."""

import glob
import os
import re
from collections.abc import Sequence
from pathlib import Path

from pcaptool.capture.compression import MAGICS
from pcaptool.capture.walkers import PCAP_MAGICS
from pcaptool.problem import Problem

SUFFIXES = (".pcap", ".pcapng", ".cap", ".ntar")
PACKED = (".gz", ".bz2", ".xz", ".zst")


def natural(path: Path | str) -> tuple[tuple[bool, int, str], ...]:
    """Return a sort key by which file 2 comes before file 10."""
    return tuple((part.isdigit(), int(part) if part.isdigit() else 0, part)
                 for part in re.split(r"(\d+)", str(path)) if part)


def find_captures(arguments: Sequence[str]) -> tuple[list[Path], list[Problem]]:
    """Return (captures in natural order, each once; problems of arguments that gave none).

    In a folder, files count by suffix, or by their first bytes when they have no known suffix.
    """
    found: dict[Path, None] = {}
    problems = []
    for argument in arguments:
        path = Path(argument)
        if path.is_dir():
            inside = [Path(folder) / name for folder, _, names in os.walk(path) for name in names
                      if looks_like_capture(Path(folder) / name)]
            if not inside:
                problems.append(Problem(
                    file=argument, place="", found="a folder without captures",
                    expected="pcap or pcapng files in it or below", fix="check the path; compressed files count too"))
            found |= dict.fromkeys(sorted(inside, key=natural))
        elif path.exists():
            found[path] = None
        else:
            matches = sorted((Path(m) for m in glob.glob(argument, recursive=True)), key=natural)
            files = [m for m in matches if m.is_file()]
            if not files:
                problems.append(Problem(file=argument, place="", found="nothing of that name",
                                        expected="a file, a folder or a pattern that matches files",
                                        fix="check the spelling and the folder you are in"))
            found |= dict.fromkeys(files)
    once: dict[Path, Path] = {}
    for path in found:
        once.setdefault(path.resolve(), path)
    return sorted(once.values(), key=natural), problems


def looks_like_capture(path: Path) -> bool:
    """Return whether a file in a folder is taken for a capture."""
    name = path.name.lower()
    for packed in PACKED:
        name = name.removesuffix(packed)
    if name.endswith(SUFFIXES):
        return True
    if "." in name:
        return False
    try:
        with open(path, "rb") as file:
            head = file.read(6)
    except OSError:
        return False
    return head[:4] in PCAP_MAGICS or head[:4] == b"\x0a\x0d\x0d\x0a" or any(head.startswith(m) for m in MAGICS)
