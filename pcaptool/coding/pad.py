"""Pad bits, fixed or ignored."""

from dataclasses import dataclass
from typing import Annotated, ClassVar, Literal

import numpy as np
from annotated_types import Ge
from typing_extensions import Doc

from pcaptool.coding.bits import bits_of
from pcaptool.coding.step import (
    NO_CONTEXT,
    Batch,
    Bits,
    Context,
    Decoded,
    LengthError,
    Step,
    too_short,
    whole,
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Pad(Step):
    """A fixed number of bits before or behind the data.

    Fixed pad bits that came wrong are channel errors, but never make a frame unusable. Ignored ones
    may have any value and are given back as they came when the word is encoded again.
    """

    name: ClassVar[str] = "pad"
    role = "order"

    bits: Annotated[int, Ge(1), Doc("number of pad bits")]
    at: Annotated[Literal["end", "start"], Doc("where they stand")] = "end"
    value: Annotated[int, Ge(0), Doc("their value as a number of that many bits")] = 0
    ignored: Annotated[bool, Doc("any value is right")] = False

    def coded_bits(self, k: int) -> int:
        return k + self.bits

    def data_bits(self, n: int) -> int:
        if n < self.bits:
            raise LengthError(f"{n} bits are fewer than {self.bits} pad bits")
        return n - self.bits

    def _cut(self, bits: Bits) -> tuple[Bits, Bits]:
        if self.at == "start":
            return bits[:, self.bits :], bits[:, : self.bits]
        k = bits.shape[1] - self.bits
        return bits[:, :k], bits[:, k:]

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        if side is None or not self.ignored:
            side = np.broadcast_to(bits_of(self.value, self.bits), (len(data), self.bits))
        return np.concatenate([side, data] if self.at == "start" else [data, side], axis=1)

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        self.data_bits(word.shape[1])
        data, side = self._cut(word)
        return data, side if self.ignored else None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        if batch.bits.shape[1] < self.bits:
            return too_short(batch)
        data, side = self._cut(batch.bits)
        doubt = None if batch.doubt is None else self._cut(batch.doubt)[0]
        return whole(batch, data, doubt, side=side if self.ignored else None)
