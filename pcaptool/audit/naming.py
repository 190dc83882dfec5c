"""Names of captures in the tables: paths below the folder that holds them all, never absolute."""

import os
from collections.abc import Sequence
from pathlib import Path


def short_names(paths: Sequence[Path]) -> dict[Path, str]:
    """Return a name for every path: relative to the common parent folder, with ``/`` between."""
    if not paths:
        return {}
    parents = [str(p.resolve().parent) for p in paths]
    common = Path(os.path.commonpath(parents))
    return {p: p.resolve().relative_to(common).as_posix() for p in paths}
