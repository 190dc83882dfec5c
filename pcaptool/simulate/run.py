"""Messages through the chain, through a channel, over a backhaul, into captures, with the truth beside."""

from collections.abc import Iterator
from dataclasses import dataclass, field
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, Any

from pcaptool.problem import Problem, UsageError
from pcaptool.profile import Profile, load_profile
from pcaptool.simulate.check import plan_problems
from pcaptool.simulate.deliver import deliver
from pcaptool.simulate.load import load_plan
from pcaptool.simulate.plan import Plan
from pcaptool.simulate.transmit import Sent, join, link_name, transmit
from pcaptool.simulate.truth import truth_columns, truth_table
from pcaptool.simulate.writer import write_file
from pcaptool.table import Column, csv_text

if TYPE_CHECKING:
    import pandas as pd

ROWS_AT_ONCE = 1 << 14
OTHERS = (".bz2", ".xz", ".zst", ".zip", ".pcapng", ".csv")


@dataclass(slots=True)
class Simulation:
    """Capture files, as bytes before compression and in order of time, and the truth of every frame."""

    profile: Profile
    plan: Plan
    captures: list[bytes] = field(repr=False)
    sent: Sent = field(repr=False)

    @property
    def columns(self) -> tuple[Column, ...]:
        """The columns of the truth."""
        return truth_columns(self.profile)

    def rows(self) -> Iterator[dict[str, object]]:
        """Yield the truth row by row, in order of sending; None is missing, times are ns since 1970."""
        for first in range(0, len(self.sent), ROWS_AT_ONCE):
            table = self._table(slice(first, first + ROWS_AT_ONCE))
            for row in zip(*table.values(), strict=True):
                yield dict(zip(table, row, strict=True))

    def _table(self, some: slice) -> dict[str, list[object]]:
        links = [link_name(self.profile, link) for link in self.plan.link]
        return truth_table(self.profile, self.sent, links, some)

    def truth(self) -> str:
        """Return the truth as CSV."""
        rows, columns = self.rows(), self.columns
        text = [csv_text(columns, ())]
        while part := list(islice(rows, ROWS_AT_ONCE)):     # so that few cells are held at once
            text.append(csv_text(columns, part).partition("\n")[2])
        return "".join(text)

    @property
    def frames(self) -> "pd.DataFrame":
        """The truth as a DataFrame with the columns of ``columns``."""
        import pandas as pd

        kinds: dict[str, Any] = {"int64": "Int64", "float64": "Float64", "bool": "bool", "label": "string",
                 "string": "string", "timestamp": "Int64"}
        table: dict[str, Any] = dict(self._table(slice(0, len(self.sent))))
        frame = pd.DataFrame({c.name: pd.array(table[c.name], dtype=kinds[c.dtype]) for c in self.columns})
        times = [c.name for c in self.columns if c.dtype == "timestamp"]
        return frame.assign(**{name: pd.to_datetime(frame[name], unit="ns", utc=True) for name in times})

    def write(self, path: str | Path) -> list[Path]:
        """Write the capture, numbered files when there are several, and the truth; return all paths.

        NAME.pcap gives NAME.pcap or NAME-01.pcap ..., and NAME.truth.csv; NAME.pcap.gz the same, all of
        them compressed. Raises UsageError for a name that promises another format.
        """
        out = Path(path)
        gz = ".gz" if out.suffix == ".gz" else ""
        bare = out.with_suffix("") if gz else out
        _check_name(out, bare)
        suffix = bare.suffix or ".pcap"
        stem = bare.name.removesuffix(bare.suffix)
        many = len(self.captures) > 1
        written = []
        for i, data in enumerate(self.captures, 1):
            written.append(out.with_name(f"{stem}-{i:02d}{suffix}{gz}" if many else f"{stem}{suffix}{gz}"))
            write_file(written[-1], data)
        written.append(out.with_name(f"{stem}.truth.csv{gz}"))
        write_file(written[-1], self.truth().encode())
        return written


def simulate(profile: Profile | str | Path, plan: Plan | str | Path, origin: str = "plan") -> Simulation:
    """Simulate a plan; the same profile and plan give the same bytes.

    profile  a profile, or the name or path of one
    plan     a plan, or the path of one
    origin   what problems call the file of a plan
    Raises UsageError with every problem of the plan, or between it and the profile.
    """
    origin = origin if isinstance(plan, Plan) else Path(plan).name
    loaded = profile if isinstance(profile, Profile) else load_profile(profile)
    checked = plan if isinstance(plan, Plan) else load_plan(plan)
    problems = plan_problems(loaded, checked, origin)
    if problems:
        raise UsageError(*problems)
    sent = join([transmit(loaded, checked, i) for i in range(len(checked.link))])
    captures = deliver(loaded, checked, sent)
    return Simulation(loaded, checked, captures, sent)


def _check_name(out: Path, bare: Path) -> None:
    if bare.suffix in OTHERS or not bare.name.removesuffix(bare.suffix):
        raise UsageError(Problem(
            file=str(out), place="", found=f"the suffix {bare.suffix or out.suffix}",
            expected="NAME.pcap or NAME.pcap.gz", fix=f"write {bare.stem or 'demo'}.pcap"))
    if not out.parent.is_dir():
        raise UsageError(Problem(file=str(out), place="", found="no folder of that name",
                                 expected="a folder that exists", fix="make it first"))
