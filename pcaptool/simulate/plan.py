"""What to simulate: links, their messages and channels, gateways, and what happens to them.

Times are seconds, or text such as "90 s", "15 min", "6 h"; moments count from the start. All rates are
probabilities.
"""

import re
from datetime import UTC, datetime
from typing import Annotated, Literal, Self

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, model_validator

DAY = 86_400.0
TIME = re.compile(r"(\d+(?:\.\d+)?) ?(ms|s|min|h|d)", re.ASCII)
UNITS = {"ms": 0.001, "s": 1.0, "min": 60.0, "h": 3600.0, "d": DAY}


def _seconds(value: object) -> object:
    if not isinstance(value, str):
        return value
    found = TIME.fullmatch(value)
    if not found:
        raise ValueError('a number of seconds, or text such as "90 s", "15 min", "6 h"')
    return float(found[1]) * UNITS[found[2]]


def _time_of_day(value: object) -> object:
    found = re.fullmatch(r"([01]\d|2[0-3]):([0-5]\d)", value) if isinstance(value, str) else None
    if not found:
        raise ValueError('a time of day such as "17:30"')
    return int(found[1]) * 3600.0 + int(found[2]) * 60.0


def _moment(value: object) -> object:
    try:
        moment = datetime.fromisoformat(value) if isinstance(value, str) else value
    except ValueError:
        moment = None
    if not isinstance(moment, datetime) or not 1970 <= moment.year < 2106:
        raise ValueError("a time of 1970 to 2105 such as 2026-03-01T06:00:00Z; UTC unless it says otherwise")
    return (moment if moment.tzinfo else moment.replace(tzinfo=UTC)).astimezone(UTC)


def _split(value: object) -> object:
    if isinstance(value, int) and not isinstance(value, bool) and 1 <= value <= 999:
        return value
    if isinstance(value, str) and TIME.fullmatch(value) and float(str(_seconds(value))) >= 0.001:
        return value
    raise ValueError('1 to 999 files, or the time of each such as "6 h"')


def _value(value: object) -> object:
    if not isinstance(value, (int, float, str)) or isinstance(value, bool):
        raise ValueError("a number, or one of the field's names")
    return value


def _tuple(value: object) -> object:
    return tuple(_tuple(v) for v in value) if isinstance(value, list) else value


Rate = Annotated[float, Field(ge=0, le=1, strict=False)]
Seconds = Annotated[float, BeforeValidator(_seconds), Field(ge=0, le=100 * 366 * DAY, strict=False)]
Span = Annotated[float, BeforeValidator(_seconds), Field(gt=0, le=100 * 366 * DAY, strict=False)]
Window = Annotated[tuple[Seconds, Seconds], BeforeValidator(_tuple)]
Windows = Annotated[tuple[Window, ...], BeforeValidator(_tuple)]
Point = Annotated[tuple[Annotated[float, BeforeValidator(_time_of_day)], Rate], BeforeValidator(_tuple)]
Number = Annotated[float, Field(strict=False)]
MeanRun = Annotated[float, Field(ge=1, strict=False)]
Value = Annotated[float | int | str, BeforeValidator(_value)]


class Strict(BaseModel):
    """Base of all parts: frozen, no unknown keys, no silent conversions."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


class Burst(Strict):
    """A two-state channel on bits; stays have the means 1 / to_bad and 1 / to_good, in bits."""

    to_bad: Rate
    to_good: Rate
    wrong: Rate = 0.5                   # error probability in the bad state
    wrong_in_good: Rate = 0.0
    fresh: bool = False                 # the state begins anew with every frame, else it runs on


class Periodic(Strict):
    """A disturber with a clock of its own, such as a pump drive's switching edges."""

    every: Span
    bits: Annotated[int, Field(ge=1, le=4096)]      # touched by each disturbance
    wrong: Rate = 0.5
    during: Windows = ()                # when the disturber runs; nothing: always


class Restart(Strict):
    """The transmitter starts again: its next counter after a moment is ``to``."""

    at: Seconds
    to: Annotated[int, Field(ge=0)] = 0


class Generator(Strict):
    """The values of a message field, in the field's unit; one of constant, ramp, walk, choice.

    ramp    from one value to the other in every ``over`` (the whole run unless given), then again
    walk    begins there and goes up or down by up to ``step`` from message to message
    choice  one of the values for each message, numbers or the field's names
    low and high bound a walk; unless given, what the field can hold does
    """

    constant: Value | None = None
    ramp: Annotated[tuple[Number, Number], BeforeValidator(_tuple)] | None = None
    over: Span | None = None
    walk: Number | None = None
    step: Annotated[float, Field(gt=0, strict=False)] | None = None
    low: Number | None = None
    high: Number | None = None
    choice: Annotated[tuple[Value, ...], BeforeValidator(_tuple), Field(min_length=1)] | None = None

    @model_validator(mode="after")
    def one_way(self) -> Self:
        ways = [way for way in ("constant", "ramp", "walk", "choice") if getattr(self, way) is not None]
        if len(ways) != 1:
            raise ValueError("exactly one of constant, ramp, walk, choice")
        for key, way in (("over", "ramp"), ("step", "walk"), ("low", "walk"), ("high", "walk")):
            if getattr(self, key) is not None and way != ways[0]:
                raise ValueError(f"{key} only beside {way}")
        return self


class LinkPlan(Strict):
    """One transmitter: its key, when and what it sends, its channel, and what happens to it."""

    key: dict[str, int] = {}            # message fields, and "wrapper.NAME", that stay as they are
    gateway: Annotated[int, Field(ge=0, le=65535)] | None = None
    fields: dict[str, Generator] = {}   # how other message fields move
    kinds: Annotated[tuple[str, ...], BeforeValidator(_tuple)] = ()     # in turn; nothing: all of the profile
    payload: Annotated[tuple[Annotated[int, Field(ge=0, le=4096)], Annotated[int, Field(ge=0, le=4096)]],
                       BeforeValidator(_tuple)] = (0, 0)    # least and most random octets behind the fields
    interval: Span = 2.0
    jitter: Rate = 0.02                 # a frame is sent up to this share of the interval later
    first: Seconds = 0.0
    frames: Annotated[int, Field(ge=0)] | None = None       # then silent
    first_counter: Annotated[int, Field(ge=0)] = 0
    bit_rate: Annotated[float, Field(gt=0, le=1e9, strict=False)] = 4800.0      # bit/s on the air

    bit_error_rate: Rate = 0.0
    bit_error_rate_by_time: Annotated[tuple[Point, ...], BeforeValidator(_tuple)] = ()
    burst: Burst | None = None
    periodic: Periodic | None = None

    loss: Rate = 0.0
    loss_burst: MeanRun | None = None   # mean run of lost frames; nothing: each for itself
    outage: Windows = ()                # nothing of the link is heard
    repeat: Rate = 0.0
    late: Rate = 0.0
    late_places: Annotated[int, Field(ge=1, le=1000)] = 2
    restart: Annotated[tuple[Restart, ...], BeforeValidator(_tuple)] = ()


class BackhaulPlan(Strict):
    """The way from gateways to the capture."""

    gateway: Annotated[int, Field(ge=0, le=65535)] | None = None        # nothing: all others
    loss: Rate = 0.0
    loss_burst: MeanRun | None = None
    outage: Windows = ()


class Plan(Strict):
    """A simulation: together with the profile, everything that its result depends on."""

    seed: Annotated[int, Field(ge=0, lt=2**63)] = 1
    start: Annotated[datetime, BeforeValidator(_moment)] = datetime(2026, 3, 1, tzinfo=UTC)
    duration: Span = 3600.0
    link: Annotated[tuple[LinkPlan, ...], BeforeValidator(_tuple), Field(min_length=1)]
    backhaul: Annotated[tuple[BackhaulPlan, ...], BeforeValidator(_tuple)] = ()
    foreign: Annotated[int, Field(ge=0, le=10_000_000)] = 0             # packets of other traffic
    per_datagram: Annotated[int, Field(ge=1, le=1000)] = 1              # frames that a gateway puts together
    snap_length: Annotated[int, Field(ge=0, lt=2**31)] = 0              # bytes kept of a packet; 0: all
    nanoseconds: bool = False           # resolution of the capture's clock; else microseconds
    byte_order: Literal["little", "big"] = "little"
    split: Annotated[int | str, BeforeValidator(_split)] = 1            # capture files, or time of each

    @property
    def start_ns(self) -> int:
        """The start, ns since 1970."""
        return int(self.start.timestamp()) * 1_000_000_000 + self.start.microsecond * 1000

    @property
    def capture_files(self) -> tuple[int, int]:
        """(how many capture files, ns of each): equal parts of the duration, or files of a given time."""
        whole = round(self.duration * 1e9)
        if isinstance(self.split, int):
            return self.split, -(-whole // self.split)
        each = round(float(str(_seconds(self.split))) * 1e9)
        return max(-(-whole // each), 1), each

    def backhaul_of(self, gateway: int) -> BackhaulPlan:
        """Return what holds for a gateway."""
        own = [b for b in self.backhaul if b.gateway == gateway]
        return (own or [b for b in self.backhaul if b.gateway is None] or [BackhaulPlan()])[0]
