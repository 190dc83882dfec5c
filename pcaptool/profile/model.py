"""The profile as a checked, frozen model: which datagrams, their wrapper, the coding chain, the message."""

from functools import cached_property
from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, WithJsonSchema
from pydantic import Field as Key

from pcaptool.coding import Chain, Step

Order = Literal["big", "little"]
NAME = r"^[A-Za-z_][A-Za-z0-9_]*$"


class Strict(BaseModel):
    """Base of all parts: frozen, no unknown keys, no silent conversions."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, arbitrary_types_allowed=True)


def _octets(value: object) -> object:
    if isinstance(value, str):
        return bytes.fromhex(value)
    return value


def _tuple(value: object) -> object:
    return tuple(value) if isinstance(value, list) else value


def _int_keys(value: object) -> object:
    if isinstance(value, dict):
        return {int(k, 0) if isinstance(k, str) else k: v for k, v in value.items()}
    return value


Octets = Annotated[bytes, BeforeValidator(_octets), WithJsonSchema({"type": "string", "pattern": r"^[0-9A-Fa-f\s]*$"})]
Names = Annotated[dict[int, str], BeforeValidator(_int_keys),
                  WithJsonSchema({"type": "object", "additionalProperties": {"type": "string"}})]
NOTHING: Any = ()


class Carrier(Strict):
    """Which datagrams belong to the profile."""

    port: Annotated[tuple[Annotated[int, Key(ge=1, le=65535)], ...], BeforeValidator(_tuple),
                    Key(min_length=1, description="UDP ports, at either end")]
    net: Annotated[tuple[str, ...], BeforeValidator(_tuple),
                   Key(description="networks, one of which holds either address")] = ()
    opening: Annotated[Octets, Key(description="first payload bytes, hex")] = b""


class WrapperField(Strict):
    """Bytes that the gateway puts round the air frame."""

    name: Annotated[str, Key(pattern=NAME)]
    bytes: Annotated[int, Key(ge=1, le=8)]
    signed: bool = False
    order: Order | None = None
    scale: Annotated[float, Key(strict=False)] = 1.0
    offset: Annotated[float, Key(strict=False)] = 0.0
    unit: str = ""
    must_be: int | None = None
    names: Names = {}

    @property
    def bits(self) -> int:
        return self.bytes * 8


Fields = Annotated[tuple[WrapperField, ...], BeforeValidator(_tuple)]


class Wrapper(Strict):
    """What stands round the air frames of a datagram."""

    order: Order = "big"
    before: Annotated[Fields, Key(description="once, at the front")] = NOTHING
    each: Annotated[Fields, Key(description="before every air frame")] = NOTHING
    after: Annotated[Fields, Key(description="once, at the end")] = NOTHING
    frames: Annotated[int | str | None, Key(description="air frames: a number or a field; absent: as many as "
                                                        "fill the datagram where each or a fixed frame_bytes "
                                                        "is given, else one")] = None
    frame_bytes: Annotated[int | str | None, Key(description="bytes of an air frame: a number, a field, or "
                                                             "absent: all that is left")] = None
    frame_bytes_plus: Annotated[int, Key(description="added to the field of frame_bytes")] = 0
    carries: Annotated[Literal["frame", "frames", "stream"],
                       Key(description="what an air frame is to the chain: one frame; several, which a step that cuts "
                                       "finds; or a piece of a stream that goes on in the next datagram")] = "frame"
    stream_by: Annotated[tuple[str, ...], BeforeValidator(_tuple),
                         Key(description="wrapper fields and carrier addresses that tell streams apart; default: "
                                         "both addresses")] = ()
    soft_bits: Annotated[Literal["", "signed-8", "signed-4"],
                         Key(description="air frames hold a confidence for each bit: a signed byte, or two in a "
                                         "byte, the first in the upper half")] = ""
    soft_one: Annotated[Literal["negative", "positive"],
                        Key(description="sign of a soft value that stands for 1")] = "negative"
    forwards: Annotated[Literal["all", "good", "unknown"],
                        Key(description="does the gateway pass on frames whose check failed?")] = "unknown"


    @property
    def several(self) -> bool:
        """True when a datagram may hold more than one frame, or parts of frames."""
        return self.carries != "frame" or bool(self.each) or self.frames not in (None, 1) or (
            self.frames is None and isinstance(self.frame_bytes, int))

    @property
    def bits_per_byte(self) -> int:
        """Bits on the air that a byte of an air frame holds."""
        return {"": 8, "signed-8": 1, "signed-4": 2}[self.soft_bits]


class Field(Strict):
    """Bits of the message; a name that begins with _ is filler."""

    name: Annotated[str, Key(pattern=NAME)]
    bits: Annotated[int, Key(ge=1, le=64)]
    signed: bool = False
    order: Order | None = None
    scale: Annotated[float, Key(strict=False)] = 1.0
    offset: Annotated[float, Key(strict=False)] = 0.0
    unit: str = ""
    must_be: int | None = None
    names: Names = {}


class Kind(Strict):
    """A kind of message: its own fields behind the common ones, when common fields say so."""

    name: Annotated[str, Key(pattern=NAME)]
    when: Annotated[dict[str, int], Key(min_length=1)]
    fields: Annotated[tuple[Field, ...], BeforeValidator(_tuple)] = ()


class Message(Strict):
    """What is left when the chain is undone."""

    order: Order = "big"
    fields: Annotated[tuple[Field, ...], BeforeValidator(_tuple)] = ()
    kind: Annotated[tuple[Kind, ...], BeforeValidator(_tuple)] = ()


class Link(Strict):
    """The key of a link: message fields, "wrapper.NAME", "carrier.source", "carrier.destination"."""

    by: Annotated[tuple[str, ...], BeforeValidator(_tuple), Key(min_length=1)]


class Counter(Strict):
    """The field that counts up from frame to frame of a link."""

    field: str
    modulo: Annotated[int, Key(ge=2, description="default: 2 to the bits of the field")] = 0
    interval: Annotated[str, Key(pattern=r"^\d+(\.\d+)? ?(ms|s|min|h)$", description='as "2 s"')] | None = None
    window: Annotated[int, Key(ge=1, le=1024, description="how far late or repeated frames may lie")] = 16

    @property
    def interval_ns(self) -> int | None:
        if self.interval is None:
            return None
        number = self.interval.rstrip("minsh ")
        unit = self.interval[len(number) :].strip()
        return int(float(number) * {"ms": 1e6, "s": 1e9, "min": 60e9, "h": 3600e9}[unit])


class Backhaul(Strict):
    """The gateway's own datagram counter."""

    counter: str
    by: Annotated[tuple[str, ...], BeforeValidator(_tuple), Key(min_length=1)]
    modulo: Annotated[int, Key(ge=2)] = 0


class Limits(Strict):
    """What an audit flags."""

    lost_percent: Annotated[float, Key(ge=0, le=100, strict=False)] | None = None
    corrupted_percent: Annotated[float, Key(ge=0, le=100, strict=False)] | None = None
    headroom: Annotated[float, Key(ge=0, le=1, strict=False)] | None = None


class Example(Strict):
    """A worked example: an air frame and what it gives."""

    air: Octets
    gives: dict[str, int | float | str]
    wrapper: dict[str, int] = {}


class Profile(Strict):
    """A profile, checked. ``sha256`` and ``text`` are those of its file."""

    format: Literal[1]
    name: Annotated[str, Key(pattern=r"^[a-z0-9][a-z0-9-]*$")]
    title: str
    basis: Annotated[str, Key(description="where these facts come from")]
    carrier: Carrier
    wrapper: Wrapper = Wrapper()
    coding: tuple[Step, ...] = ()
    message: Message = Message()
    link: Link
    counter: Counter | None = None
    backhaul: Backhaul | None = None
    limits: Limits = Limits()
    example: Annotated[tuple[Example, ...], BeforeValidator(_tuple)] = ()
    sha256: str = ""
    text: str = ""
    origin: str = ""

    @cached_property
    def chain(self) -> Chain:
        """The coding chain."""
        return Chain(self.coding)

    @cached_property
    def wrapper_fields(self) -> dict[str, WrapperField]:
        """Wrapper fields by name."""
        w = self.wrapper
        return {f.name: f for f in (*w.before, *w.each, *w.after)}

    @cached_property
    def message_fields(self) -> dict[str, Field]:
        """Message fields by name, those of all kinds; of equal names the first."""
        out: dict[str, Field] = {}
        for group in (self.message.fields, *(k.fields for k in self.message.kind)):
            for field in group:
                if not field.name.startswith("_"):
                    out.setdefault(field.name, field)
        return out

    def find_field(self, reference: str) -> WrapperField | Field:
        """Return the field that a reference names; KeyError when there is none."""
        if reference.startswith("wrapper."):
            return self.wrapper_fields[reference.removeprefix("wrapper.")]
        return self.message_fields[reference]


def bit_positions(order: str, offset: int, bits: int) -> list[int]:
    """Return the message bits of a field, its most significant first.

    Bit 0 of a message is the most significant bit of its first byte. A big-endian field takes bits
    in that order; a little-endian one counts from the least significant bit of each byte, and its
    first bit is its least significant.
    """
    if order == "big":
        return list(range(offset, offset + bits))
    return [i // 8 * 8 + 7 - i % 8 for i in range(offset + bits - 1, offset - 1, -1)]
