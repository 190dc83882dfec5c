"""Find captures: files, folders searched downwards, and patterns."""

import glob
import os
import re
from collections.abc import Sequence
from pathlib import Path

from pcaptool.capture.compression import Source
from pcaptool.capture.records import PCAPNG_MAGIC
from pcaptool.capture.walkers import PCAP_MAGICS
from pcaptool.problem import CaptureError, Problem

SUFFIXES = (".pcap", ".pcapng", ".cap", ".ntar")
PACKED = (".gz", ".bz2", ".xz", ".zst")


def natural(path: Path | str) -> tuple[tuple[bool, int, str], ...]:
    """Return a sort key by which file 2 comes before file 10."""
    return tuple((part.isdecimal(), int(part) if part.isdecimal() and len(part) < 19 else 0, part)
                 for part in re.split(r"(\d+)", str(path)) if part)


def find_captures(arguments: Sequence[str]) -> tuple[list[Path], list[Problem]]:
    """Return (captures in natural order, each once; problems of arguments that gave none).

    In a folder, files count that have a known suffix or begin as captures do.
    """
    found: list[Path] = []
    problems: list[Problem] = []
    for argument in arguments:
        path = Path(argument)
        if path.is_dir():
            found += _in_folder(path, problems)
        elif path.exists():
            found.append(path)
        else:
            matches = [Path(match) for match in glob.glob(os.path.expanduser(argument), recursive=True)]
            files = [match for match in matches if match.is_file()]
            if not files:
                problems.append(Problem(file=argument, place="", found="nothing of that name",
                                        expected="a file, a folder or a pattern that matches files",
                                        fix="check the spelling and the folder you are in"))
            found += files
    once: dict[Path, Path] = {}
    for path in sorted(found, key=natural):
        once.setdefault(path.resolve(), path)
    return list(once.values()), problems


def _in_folder(folder: Path, problems: list[Problem]) -> list[Path]:
    closed: list[OSError] = []
    paths = [Path(where) / name for where, _, names in os.walk(folder, onerror=closed.append) for name in names]
    inside = [path for path in paths if path.is_file() and looks_like_capture(path)]
    for error in closed:
        problems.append(Problem(file=str(error.filename), place="", found=error.strerror or "a closed folder",
                                expected="a folder that can be read", fix="check its permissions"))
    if not inside and not closed:
        problems.append(Problem(file=str(folder), place="", found="a folder without captures",
                                expected="pcap or pcapng files in it or below",
                                fix="check the path; compressed files count too"))
    return inside


def looks_like_capture(path: Path) -> bool:
    """Return whether a file in a folder is taken for a capture: by its name, or by its first bytes."""
    name = path.name.lower()
    for packed in PACKED:
        name = name.removesuffix(packed)
    if name.endswith(SUFFIXES):
        return True
    try:
        source = Source(path)
    except CaptureError:
        return False
    head = bytearray(4)
    source.read_into(memoryview(head))
    source.close()
    return bytes(head) in PCAP_MAGICS or bytes(head) == PCAPNG_MAGIC
