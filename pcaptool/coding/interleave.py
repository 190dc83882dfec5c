"""Interleaving: block and convolutional interleavers of bits, bytes or symbols, and any permutation."""

from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, ClassVar

import numpy as np
from annotated_types import Ge
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.bits import take_columns
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


@lru_cache(maxsize=256)
def _positions(order: tuple[int, ...], unit: int, n: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return (bit of the data that place j on the air carries, the inverse) for words of n bits."""
    blocks = np.arange(n // (unit * len(order)))
    symbols = (np.array(order) + len(order) * blocks[:, None]).reshape(-1)
    forward = (symbols[:, None] * unit + np.arange(unit)).reshape(-1)
    return forward, np.argsort(forward)


@lru_cache(maxsize=256)
def _delayed(branches: int, delay: int, unit: int, n: int) -> NDArray[np.int64]:
    """Return where bit j of n data bits is sent: symbol i goes to branch i mod I, b M I symbols later in branch b."""
    symbol = np.arange(n // unit)
    later = symbol + symbol % branches * delay * branches
    places: NDArray[np.int64] = (later[:, None] * unit + np.arange(unit)).reshape(-1)
    return places


@lru_cache(maxsize=256)
def _by_columns(rows: int, columns: int) -> tuple[int, ...]:
    """Return the places of a block, written row by row, in the order they are sent, column by column."""
    return tuple(row * columns + column for column in range(columns) for row in range(rows))


@dataclass(frozen=True, slots=True, kw_only=True)
class Interleave(Step):
    """Symbols in another order: written row by row and sent column by column, as listed, or delayed in branches.

    A word longer than one block is interleaved block by block. Source: CCSDS 131.0-B, 4.4.1, with
    rows = depth and columns = codeword length; the definition of a block interleaver. Forney (1971), IEEE
    Trans. Commun. 19:772-781, for branches: registers begin with zeros, and zeros follow the data until
    all of it is out, so that a frame becomes (branches - 1) branches delay symbols longer.
    """

    name: ClassVar[str] = "interleave"
    role = "order"

    rows: Annotated[int, Ge(0), Doc("rows of a block interleaver")] = 0
    columns: Annotated[int, Ge(0), Doc("columns; written row by row, sent column by column")] = 0
    order: Annotated[tuple[int, ...], Doc("instead: order[j] is the symbol that is sent at place j")] = ()
    branches: Annotated[int, Ge(0), Doc("instead: branches I of a convolutional interleaver")] = 0
    delay: Annotated[int, Ge(1), Doc("symbols M that each branch delays more than the one before")] = 1
    unit: Annotated[int, Ge(1), Doc("bits of a symbol: 1, 8 for bytes, any other")] = 1

    def __post_init__(self) -> None:
        given = [key for key in ("rows", "order", "branches") if getattr(self, key)]
        if len(given) > 1:
            raise ParameterError(given[1], found=" with ".join(given), expected="one of them", fix="leave one out")
        if self.branches == 1:
            raise ParameterError("branches", found="1", expected="at least 2", fix="leave the step out")
        if self.branches:
            return
        if self.order:
            if self.columns:
                raise ParameterError("order", found="order with columns", expected="one of them",
                                     fix="leave one out")
            if sorted(self.order) != list(range(len(self.order))):
                raise ParameterError("order", found=f"{len(self.order)} places that are no permutation",
                                     expected=f"every number from 0 to {len(self.order) - 1} once",
                                     fix="look for a number that is missing or twice there")
        elif not (self.rows and self.columns):
            raise ParameterError("rows", found=f"rows = {self.rows}, columns = {self.columns}",
                                 expected="both at least 1, or order", fix="set rows and columns")

    @property
    def sent(self) -> tuple[int, ...]:
        """The symbol sent at every place of a block."""
        return self.order or _by_columns(self.rows, self.columns)

    @property
    def block(self) -> int:
        """Bits of a block."""
        return (1 if self.branches else len(self.order) or self.rows * self.columns) * self.unit

    @property
    def added(self) -> int:
        """Bits that a convolutional interleaver adds to a frame."""
        return max(self.branches - 1, 0) * self.branches * self.delay * self.unit

    def coded_bits(self, k: int) -> int:
        if k % self.block or not k:
            raise LengthError(f"{k} bits are no whole number of interleaver "
                              f"{'symbols' if self.branches else 'blocks'} of {self.block} bits")
        return k + self.added

    def data_bits(self, n: int) -> int:
        if n <= self.added:
            raise LengthError(f"{n} bits are not more than the {self.added} that the interleaver adds")
        self.coded_bits(n - self.added)
        return n - self.added

    def _back(self, n: int) -> NDArray[np.int64]:
        """Return the column on the air of every data bit, for words of n bits."""
        if self.branches:
            return _delayed(self.branches, self.delay, self.unit, n - self.added)
        return _positions(self.sent, self.unit, n)[1]

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        n = self.coded_bits(data.shape[1])
        if self.branches:
            out = np.zeros((len(data), n), np.uint8)
            out[:, self._back(n)] = data
            return out
        return take_columns(data, _positions(self.sent, self.unit, data.shape[1])[0])

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        self.data_bits(word.shape[1])
        return take_columns(word, self._back(word.shape[1])), None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        try:
            self.data_bits(batch.bits.shape[1])
        except LengthError:
            return too_short(batch)
        back = self._back(batch.bits.shape[1])
        doubt = None if batch.doubt is None else take_columns(batch.doubt, back)
        return whole(batch, take_columns(batch.bits, back), doubt)
