"""What to simulate: links, their channels, and what happens to them."""

import tomllib
from datetime import datetime
from pathlib import Path
from typing import Annotated

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationError

from pcaptool.problem import Problem, UsageError

Rate = Annotated[float, Field(ge=0, le=1, strict=False)]
Seconds = Annotated[float, Field(ge=0, strict=False)]


class Strict(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


def _tuple(value: object) -> object:
    return tuple(_tuple(v) for v in value) if isinstance(value, list) else value


class Burst(Strict):
    """A two-state channel on bits."""

    to_bad: Rate
    to_good: Rate
    wrong: Rate = 0.5


class Periodic(Strict):
    """A disturbance every some bits, such as a drive's switching edges."""

    period: Annotated[int, Field(ge=1)]
    length: Annotated[int, Field(ge=1)]
    wrong: Rate = 0.5
    share: Rate = 1.0           # of the frames in which the disturber runs


class Weak(Strict):
    """Independent errors at another rate between two moments, s after the start."""

    begin: Seconds
    end: Seconds
    bit_error_rate: Rate


class LinkPlan(Strict):
    """One transmitter: its key, how often it sends, and its channel."""

    key: dict[str, int] = {}                    # "wrapper.NAME" and message fields that stay constant
    interval: Annotated[float, Field(gt=0, strict=False)] = 2.0     # s
    jitter: Rate = 0.02                         # of the interval
    first: Seconds = 0.0                        # s after the start
    kinds: Annotated[tuple[str, ...], BeforeValidator(_tuple)] = ()
    first_counter: Annotated[int, Field(ge=0)] = 0
    bit_error_rate: Rate = 0.0
    burst: Burst | None = None
    periodic: Periodic | None = None
    weak: Annotated[tuple[Weak, ...], BeforeValidator(_tuple)] = ()
    loss: Rate = 0.0
    loss_burst: Annotated[float, Field(ge=1, strict=False)] = 1.0
    repeat: Rate = 0.0
    late: Rate = 0.0
    late_places: Annotated[int, Field(ge=1)] = 2
    restart_at: Annotated[tuple[float, ...], BeforeValidator(_tuple)] = ()      # s after the start
    outage: Annotated[tuple[tuple[float, float], ...], BeforeValidator(_tuple)] = ()


class Plan(Strict):
    """A simulation: everything that its result depends on."""

    seed: int = 1
    start: str = "2026-03-01T00:00:00+00:00"
    duration: Annotated[float, Field(gt=0, strict=False)] = 3600.0  # s
    link: Annotated[tuple[LinkPlan, ...], BeforeValidator(_tuple)]
    backhaul_loss: dict[str, Rate] = {}         # by gateway, "*" for all
    foreign: Annotated[int, Field(ge=0)] = 0    # packets of other traffic
    per_datagram: Annotated[int, Field(ge=1)] = 1
    snap_length: Annotated[int, Field(ge=0)] = 0
    nanoseconds: bool = False
    parts: Annotated[int, Field(ge=1)] = 1      # capture files of equal time

    @property
    def start_ns(self) -> int:
        moment = datetime.fromisoformat(self.start)
        return int(moment.timestamp()) * 1_000_000_000


def load_plan(path: Path) -> Plan:
    """Load a plan from TOML; raises UsageError with all its problems."""
    try:
        return Plan.model_validate(tomllib.loads(path.read_text("utf-8")))
    except ValidationError as error:
        raise UsageError(*(Problem(
            file=path.name, place=".".join(str(p) for p in e["loc"]), found=str(e["input"])[:60], expected=e["msg"],
            fix="see 'pcaptool simulate --help' for a plan") for e in error.errors())) from None
    except (OSError, tomllib.TOMLDecodeError) as error:
        raise UsageError(Problem(file=path.name, place="", found=str(error), expected="a plan in TOML",
                                 fix="check the path and that line")) from None
