"""An audit as the user sees it: tables in memory, and a folder of files."""

import os
import shutil
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

from pcaptool.audit import AuditResult, Options, run_audit
from pcaptool.audit.detect import choose_profiles
from pcaptool.audit.table import CAPTURES
from pcaptool.capture import find_captures
from pcaptool.links.table import GAPS, INTERVALS, LINKS
from pcaptool.problem import Problem, UsageError
from pcaptool.profile import Profile, conflicts, load_profile
from pcaptool.report.frames_csv import frames_to_csv
from pcaptool.report.html import write_html
from pcaptool.report.summary import summary_of, write_summary
from pcaptool.table import Column, csv_text, write_whole

if TYPE_CHECKING:
    import pandas as pd


@dataclass
class Audit:
    """The result of an audit. Its tables are pandas DataFrames with the columns documented in the manual."""

    result: AuditResult

    @property
    def summary(self) -> dict[str, object]:
        """What summary.json holds."""
        return summary_of(self.result)

    @cached_property
    def links(self) -> "pd.DataFrame":
        """One row per link."""
        return _table(LINKS, self.result.links)

    @cached_property
    def gaps(self) -> "pd.DataFrame":
        """One row per gap."""
        return _table(GAPS, self.result.gaps)

    @cached_property
    def intervals(self) -> "pd.DataFrame":
        """One row per link and time bin."""
        return _table(INTERVALS, self.result.intervals)

    @cached_property
    def captures(self) -> "pd.DataFrame":
        """One row per capture."""
        return _table(CAPTURES, self.result.captures)

    @cached_property
    def frames(self) -> "pd.DataFrame":
        """One row per frame heard; read from disk when first asked for."""
        import pandas as pd

        return pd.read_parquet(self._file("frames.parquet"))

    @cached_property
    def errors(self) -> "pd.DataFrame":
        """One row per channel error."""
        import pandas as pd

        return pd.read_parquet(self._file("errors.parquet"))

    def _file(self, name: str) -> Path:
        folder = self.result.folder
        if not (folder / name).exists():
            raise UsageError(Problem(file=name, place="", found="an audit without a frame table", expected="one with",
                                     fix="run the audit with frames"))
        return folder / name

    def close(self) -> None:
        """Remove the frame table from its temporary place; what ``write`` wrote stays."""
        self.result.close()

    def write(self, folder: str | Path, *, frames: str = "parquet") -> Path:
        """Write all files of the audit and return the path of report.html.

        frames  "parquet", "csv" or "none". Files are written beside their place and then renamed.
        """
        out = Path(folder)
        out.mkdir(parents=True, exist_ok=True)
        r = self.result
        if (r.folder / "frames.parquet").exists() and frames != "none":
            _place(r.folder / "errors.parquet", out / "errors.parquet")
            if frames == "csv":
                frames_to_csv(r.folder / "frames.parquet", out / "frames.csv")
            else:
                _place(r.folder / "frames.parquet", out / "frames.parquet")
        summary = self.summary
        for name, columns, rows in (("captures", CAPTURES, r.captures), ("links", LINKS, r.links),
                                    ("gaps", GAPS, r.gaps), ("intervals", INTERVALS, r.intervals)):
            write_whole(out / f"{name}.csv", csv_text(columns, rows).encode())
        write_html(out / "report.html", summary, r.links, r.captures, r.intervals, r.gaps)
        write_summary(out / "summary.json", summary)
        return out / "report.html"


def _place(source: Path, target: Path) -> None:
    """Put a file of the audit in its place, by a link where the file system allows, else by a copy."""
    beside = target.with_name(target.name + ".part")
    beside.unlink(missing_ok=True)
    try:
        os.link(source, beside)
    except OSError:
        shutil.copyfile(source, beside)
    os.replace(beside, target)


def _table(columns: Sequence[Column], rows: Sequence[dict[str, object]]) -> "pd.DataFrame":
    import pandas as pd

    kinds = {"int64": "Int64", "double": "Float64", "string": "string", "timestamp": "datetime64[ns, UTC]"}
    data = {}
    for column in columns:
        values = [row[column.name] for row in rows]
        if column.dtype == "timestamp":
            data[column.name] = pd.to_datetime(pd.Series(values, dtype="Int64"), unit="ns", utc=True)
        else:
            data[column.name] = pd.Series(values, dtype=kinds[column.dtype])
    return pd.DataFrame(data)


def audit(
    captures: str | Path | Sequence[str | Path],
    profile: str | Path | Profile | Sequence[str | Path | Profile] | None = None,
    *,
    options: Options | None = None,
    near: Path | None = None,
) -> Audit:
    """Audit captures: files, folders, patterns.

    profile  names, files or loaded profiles; None tries the shipped ones and takes what fits
    near     folder in which the frame table may lie while the audit lives; None: the system's for that
    Raises UsageError, ProfileError, and CaptureError when no capture could be read at all.
    """
    arguments = [captures] if isinstance(captures, str | Path) else list(captures)
    paths, problems = find_captures([str(a) for a in arguments])
    if not paths:
        raise UsageError(*problems)
    given = [profile] if isinstance(profile, str | Path | Profile) else list(profile or ())
    profiles = [p if isinstance(p, Profile) else load_profile(p) for p in given]
    if not given:
        profiles = choose_profiles(paths)
    clashes = conflicts(profiles)
    if clashes:
        raise UsageError(*clashes)
    return Audit(run_audit(paths, profiles, options or Options(), near, problems))
