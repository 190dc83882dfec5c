"""A length that travels in front of the data."""

from dataclasses import dataclass
from typing import Annotated, ClassVar, Literal

import numpy as np
from annotated_types import Ge, Le
from typing_extensions import Doc

from pcaptool.coding.bits import bits_of, numbers_of
from pcaptool.coding.step import (
    NO_CONTEXT,
    SHORT,
    Batch,
    Bits,
    Context,
    Decoded,
    LengthError,
    ParameterError,
    Step,
    too_short,
    whole,
)
from pcaptool.coding.strength import Strength


@dataclass(frozen=True, slots=True, kw_only=True)
class Length(Step):
    """A length field before the data: value = data units + plus. What lies behind the data is ignored."""

    name: ClassVar[str] = "length"
    role = "frame"

    bits: Annotated[int, Ge(1), Le(32), Doc("bits of the length field")] = 8
    order: Annotated[Literal["big", "little"], Doc("octet order of the field")] = "big"
    unit: Annotated[int, Ge(1), Doc("data bits of one counted unit")] = 8
    plus: Annotated[int, Doc("added to the number of units: what the field counts besides the data")] = 0

    def __post_init__(self) -> None:
        if self.order == "little" and self.bits % 8:
            raise ParameterError("order", found=f"little with {self.bits} bits", expected="whole octets",
                                 fix='set order = "big", or bits to a multiple of 8')

    def coded_bits(self, k: int) -> int:
        units, rest = divmod(k, self.unit)
        if rest or not 0 <= units + self.plus < 1 << self.bits:
            raise LengthError(f"{k} data bits cannot be written in a length field of {self.bits} bits")
        return self.bits + k

    def data_bits(self, n: int) -> int:
        if n < self.bits:
            raise LengthError(f"{n} bits are fewer than the {self.bits} of the length field")
        self.coded_bits(n - self.bits)
        return n - self.bits

    def _field(self, value: int) -> Bits:
        if self.order == "little":
            value = int.from_bytes(value.to_bytes(self.bits // 8, "little"), "big")
        return bits_of(value, self.bits)

    def strength(self, k: int) -> Strength:
        fitting = min(k // self.unit + 1, max((1 << self.bits) - max(self.plus, 0), 0))
        return Strength(f"{self.bits} bits", fitting / 2.0**self.bits, exact=self.plus >= 0)

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        self.coded_bits(data.shape[1])
        field = np.broadcast_to(self._field(data.shape[1] // self.unit + self.plus), (len(data), self.bits))
        return np.concatenate([field, data] if side is None else [field, data, side], axis=1)

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        self.data_bits(word.shape[1])
        return word[:, self.bits :], None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        frames, width = batch.bits.shape
        if width < self.bits:
            return too_short(batch)
        field = batch.bits[:, : self.bits]
        if self.order == "little":
            field = field.reshape(frames, self.bits // 8, 8)[:, ::-1].reshape(frames, self.bits)
        length = (numbers_of(field).astype(np.int64) - self.plus) * self.unit
        rest = batch.bits[:, self.bits :]
        doubt = None if batch.doubt is None else batch.doubt[:, self.bits :]
        short = (length < 0) | (length > rest.shape[1])
        if (length == rest.shape[1]).all():
            return whole(batch, rest, doubt)
        length = np.where(short, 0, length)
        side = np.zeros(rest.shape, np.uint8)
        for value in np.unique(length):
            rows = length == value
            side[rows, : rest.shape[1] - value] = rest[rows, value:]
        out = whole(batch, rest, doubt, side=side, side_length=rest.shape[1] - length)
        out.length = length
        out.fault[short] = SHORT
        return out
