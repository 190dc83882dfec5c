"""Steps that are a binary linear block code: what they share."""

from abc import abstractmethod

from pcaptool.coding.linear import LinearCode
from pcaptool.coding.step import NO_CONTEXT, Batch, Bits, Context, Decoded, Step


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

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        return self.code.strip(word), None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        return self.code.decode(batch)
