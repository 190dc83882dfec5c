"""Other orders of bits and bytes on the air: bits reversed in bytes, bytes reversed in words."""

from dataclasses import dataclass
from typing import Annotated, ClassVar

import numpy as np
from annotated_types import Ge
from numpy.typing import NDArray
from typing_extensions import Doc

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
class BitOrder(Step):
    """Groups of ``unit`` bits in reverse order within every ``within`` bits.

    unit 1, within 8: bits of every byte reversed. unit 8, within 16: the bytes of every 16-bit word
    swapped. unit 4, within 8: nibbles swapped. Its own inverse.
    """

    name: ClassVar[str] = "bit_order"
    role = "order"

    unit: Annotated[int, Ge(1), Doc("bits that stay together")] = 1
    within: Annotated[int, Ge(2), Doc("bits of a word in which the units are reversed")] = 8

    def __post_init__(self) -> None:
        if self.within % self.unit:
            raise ParameterError("within", found=str(self.within),
                                 expected=f"a multiple of unit = {self.unit}",
                                 fix=f"set within = {self.unit * 2}")

    def coded_bits(self, k: int) -> int:
        if k % self.within:
            raise LengthError(f"{k} bits are no whole number of words of {self.within} bits")
        return k

    def data_bits(self, n: int) -> int:
        return self.coded_bits(n)

    def _reverse(self, bits: NDArray[np.uint8]) -> NDArray[np.uint8]:
        n, width = bits.shape
        if self.unit == 1 and self.within == 8 and width:
            return np.ascontiguousarray(bits).view(np.uint64).byteswap().view(np.uint8)
        words = bits.reshape(n, width // self.within, self.within // self.unit, self.unit)
        return np.ascontiguousarray(words[:, :, ::-1]).reshape(n, width)

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        self.coded_bits(data.shape[1])
        return self._reverse(data)

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        self.data_bits(word.shape[1])
        return self._reverse(word), None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        if batch.bits.shape[1] % self.within:
            return too_short(batch)
        return whole(batch, self._reverse(batch.bits),
                     None if batch.doubt is None else self._reverse(batch.doubt))
