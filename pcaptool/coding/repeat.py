"""Repetition with majority decision."""

from dataclasses import dataclass
from math import comb
from typing import Annotated, ClassVar, Literal

import numpy as np
from annotated_types import Ge, Le
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.step import (
    NO_CONTEXT,
    UNCORRECTABLE,
    Batch,
    Bits,
    Context,
    Decoded,
    LengthError,
    Step,
    too_short,
    whole,
)
from pcaptool.coding.strength import Codewords, Strength


@dataclass(frozen=True, slots=True, kw_only=True)
class Repeat(Step):
    """Every bit, or the whole word, sent several times; erased copies have no vote, ties are given up."""

    name: ClassVar[str] = "repeat"
    role = "code"

    times: Annotated[int, Ge(2), Le(255), Doc("copies sent")]
    order: Annotated[Literal["bit", "word"],
                     Doc("bit: each bit at once; word: the whole word again and again")] = "bit"

    def coded_bits(self, k: int) -> int:
        return k * self.times

    def data_bits(self, n: int) -> int:
        if n % self.times:
            raise LengthError(f"{n} bits are no multiple of {self.times}")
        return n // self.times

    def _copies(self, word: NDArray[np.uint8]) -> NDArray[np.uint8]:
        """Return uint8 (frame, copy, bit)."""
        n, k = len(word), word.shape[1] // self.times
        if self.order == "word":
            return word.reshape(n, self.times, k)
        return word.reshape(n, k, self.times).swapaxes(1, 2)

    def strength(self, k: int) -> Strength:
        ties = 0.0 if self.times % 2 else comb(self.times, self.times // 2) / 2.0**self.times
        return Strength(f"distance {self.times}, corrects {(self.times - 1) // 2} of {self.times} copies",
                        (1 - ties) ** k)

    def codewords(self, n: int) -> Codewords:
        bit = np.arange(n)
        k = n // self.times
        return Codewords(bit % k if self.order == "word" else bit // self.times, bit, (self.times - 1) // 2)

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        return np.tile(data, self.times) if self.order == "word" else np.repeat(data, self.times, axis=1)

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        self.data_bits(word.shape[1])
        return self._copies(word)[:, 0].copy(), None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        if batch.bits.shape[1] % self.times:
            return too_short(batch)
        copies = self._copies(batch.bits)
        votes = np.ones_like(copies)
        if batch.doubt is not None:
            votes = (self._copies(batch.doubt) < 255).astype(np.uint8)
        ones = (copies & votes).sum(axis=1, dtype=np.int32)
        cast = votes.sum(axis=1, dtype=np.int32)
        out = whole(batch, (2 * ones > cast).astype(np.uint8))
        tie = (2 * ones == cast).any(axis=1)
        out.fault[tie] = UNCORRECTABLE
        out.repaired[:] = (copies != out.bits[:, None]).sum(axis=(1, 2))
        errors = np.minimum(ones, cast - ones)
        spent = (2 * errors + self.times - cast).max(axis=1, initial=0)
        left = np.maximum(1 - spent / (2 * max((self.times - 1) // 2, 1)), 0).astype(np.float32)
        left[tie] = 0
        out.headroom = left if self.times > 2 else None
        return out
