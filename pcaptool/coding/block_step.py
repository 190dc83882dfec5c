"""Steps that are a binary linear block code: what they share."""

from abc import abstractmethod

import numpy as np

from pcaptool.coding.linear import LinearCode
from pcaptool.coding.step import NO_CONTEXT, Batch, Bits, Context, Decoded, Step
from pcaptool.coding.strength import Codewords, Strength


class BlockStep(Step):
    """Base of block code steps: the frame is one codeword after the other."""

    __slots__ = ()
    role = "code"

    @property
    @abstractmethod
    def code(self) -> LinearCode:
        """The code that the parameters describe."""

    def coded_bits(self, k: int) -> int:
        return self.code.coded_bits(k)

    def data_bits(self, n: int) -> int:
        return self.code.data_bits(n)

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        return self.code.encode(data)

    def strength(self, k: int) -> Strength:
        code, words = self.code, k // self.code.k
        distance = f", distance {code.distance}" if code.distance else ""
        share = float((code.weights >= 0).sum() / 2.0 ** (code.n - code.k))
        return Strength(f"({code.n},{code.k}){distance}, corrects {code.t} of {code.n} bits", share**words)

    def codewords(self, n: int) -> Codewords:
        bit = np.arange(n)
        return Codewords(bit // self.code.n, bit, self.code.t)

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        return self.code.strip(word), None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        return self.code.decode(batch)
