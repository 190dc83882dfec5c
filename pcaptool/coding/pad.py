"""Pad bits, fixed or ignored."""

from dataclasses import dataclass
from typing import Annotated, ClassVar, Literal

import numpy as np
from annotated_types import Ge, Le
from typing_extensions import Doc

from pcaptool.coding.bits import bits_of
from pcaptool.coding.step import (
    NO_CONTEXT,
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


@dataclass(frozen=True, slots=True, kw_only=True)
class Pad(Step):
    """A fixed number of bits before or behind the data, or as many as fill a multiple.

    Fixed pad bits that came wrong are channel errors, but never make a frame unusable. Ignored ones
    may have any value and are given back as they came when the word is encoded again.

    With ``to`` the word itself cannot tell how many bits are padding: ``decode`` leaves them behind
    the data, and a ``length`` step inside this one cuts them off.
    """

    name: ClassVar[str] = "pad"
    role = "order"

    bits: Annotated[int, Ge(0), Le(1 << 16), Doc("number of pad bits")] = 0
    to: Annotated[int, Ge(0), Le(1 << 16), Doc("instead: pad behind the data to a multiple of so many bits; "
                                  "needs a length step before it")] = 0
    at: Annotated[Literal["end", "start"], Doc("where they stand")] = "end"
    value: Annotated[int, Ge(0), Doc("their value: a number of that many bits; with to, 0 or 1 for all")] = 0
    ignored: Annotated[bool, Doc("any value is right")] = False

    def __post_init__(self) -> None:
        if bool(self.bits) == bool(self.to):
            raise ParameterError("bits", found="bits and to" if self.bits else "neither bits nor to",
                                 expected="one of them, at least 1", fix="set bits, or to")
        if self.value >> (self.bits or 1):
            raise ParameterError("value", found=hex(self.value), expected=f"at most {self.bits or 1} bits",
                                 fix="set a smaller value" if self.bits else "set 0 or 1")
        if self.to and (self.at == "start" or self.ignored):
            raise ParameterError("to", found="to with at = start or ignored",
                                 expected="padding behind the data",
                                 fix="set bits instead of to")

    def coded_bits(self, k: int) -> int:
        return -(-k // self.to) * self.to if self.to else k + self.bits

    def data_bits(self, n: int) -> int:
        if n < self.bits or self.to and n % self.to:
            raise LengthError(f"no word with its padding has {n} bits")
        return n - self.bits

    def _cut(self, bits: Bits) -> tuple[Bits, Bits]:
        if self.at == "start":
            return bits[:, self.bits :], bits[:, : self.bits]
        k = bits.shape[1] - self.bits
        return bits[:, :k], bits[:, k:]

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        count = self.coded_bits(data.shape[1]) - data.shape[1]
        if side is None or not self.ignored:
            fill = np.full(count, self.value, np.uint8) if self.to else bits_of(self.value, count)
            side = np.broadcast_to(fill, (len(data), count))
        return np.concatenate([side, data] if self.at == "start" else [data, side], axis=1)

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        self.data_bits(word.shape[1])
        data, side = self._cut(word)
        return data, side if self.ignored else None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        try:
            self.data_bits(batch.bits.shape[1])
        except LengthError:
            return too_short(batch)
        data, side = self._cut(batch.bits)
        doubt = None if batch.doubt is None else self._cut(batch.doubt)[0]
        return whole(batch, data, doubt, side=side if self.ignored else None)
