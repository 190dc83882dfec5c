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
    the data, and a ``length`` step inside this one cuts them off; unless ``unit`` says of what the data
    are a multiple.
    """

    name: ClassVar[str] = "pad"
    role = "order"

    bits: Annotated[int, Ge(0), Le(1 << 16), Doc("number of pad bits")] = 0
    to: Annotated[int, Ge(0), Le(1 << 16), Doc("instead: pad behind the data to a multiple of so many bits; "
                                  "needs a length step before it")] = 0
    unit: Annotated[int, Ge(0), Le(1 << 16), Doc("with to: the data are a multiple of so many bits, more than "
                                                 "the padding can be; 0: nothing is known")] = 0
    least: Annotated[int, Ge(0), Le(1 << 16), Doc("with to: pad bits that are always there")] = 0
    pattern: Annotated[str, Doc('with to: pad bits written "0b01011", from the front and again; default value')] = ""
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
        for key in ("unit", "least", "pattern"):
            if getattr(self, key) and not self.to:
                raise ParameterError(key, found=f"{key} without to", expected="to set as well", fix=f"leave {key} out")
        if self.unit and self.unit < self.to + self.least:
            raise ParameterError("unit", found=str(self.unit), expected=f"at least {self.to + self.least}, more than "
                                 "the padding can be", fix="leave unit out and put a length step before")
        if self.pattern and not (self.pattern.startswith("0b") and set(self.pattern[2:]) in ({"0"}, {"1"}, {"0", "1"})):
            raise ParameterError("pattern", found=repr(self.pattern), expected='"0b" and bits',
                                 fix='write for example "0b0101"')
        if self.to and (self.at == "start" or self.ignored):
            raise ParameterError("to", found="to with at = start or ignored",
                                 expected="padding behind the data",
                                 fix="set bits instead of to")

    def coded_bits(self, k: int) -> int:
        if self.unit and k % self.unit:
            raise LengthError(f"{k} bits are no multiple of {self.unit}")
        return -(-(k + self.least) // self.to) * self.to if self.to else k + self.bits

    def data_bits(self, n: int) -> int:
        if n < self.bits + self.least or self.to and n % self.to:
            raise LengthError(f"no word with its padding has {n} bits")
        if self.unit:
            k = (n - self.least) // self.unit * self.unit
            if self.coded_bits(k) != n:
                raise LengthError(f"no word with its padding has {n} bits")
            return k
        return n - self.bits - self.least

    def _cut(self, bits: Bits) -> tuple[Bits, Bits]:
        if self.at == "start":
            return bits[:, self.bits :], bits[:, : self.bits]
        k = self.data_bits(bits.shape[1])
        return bits[:, :k], bits[:, k:]

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        count = self.coded_bits(data.shape[1]) - data.shape[1]
        if side is None or not self.ignored:
            again = np.array([int(c) for c in self.pattern[2:]] or [self.value & 1], np.uint8)
            fill = np.resize(again, count) if self.to else bits_of(self.value, count)
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
