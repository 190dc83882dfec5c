"""Self-synchronising scramblers: the sequence is made of the bits on the air themselves."""

from dataclasses import dataclass
from typing import Annotated, ClassVar

import numpy as np
from annotated_types import Ge
from numba import njit
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.step import NO_CONTEXT, Batch, Bits, Context, Decoded, ParameterError, Step, whole
from pcaptool.coding.whiten import delays_of


@njit(cache=True, nogil=True)
def _scrambled(data: NDArray[np.uint8], delays: NDArray[np.int64], history: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Return y[n] = x[n] + sum of y[n - d]; history: the m bits on the air before, earliest first."""
    m = len(history)
    out = np.empty((data.shape[0], m + data.shape[1]), np.uint8)
    for i in range(data.shape[0]):
        out[i, :m] = history
        for j in range(data.shape[1]):
            bit = data[i, j]
            for d in delays:
                bit ^= out[i, m + j - d]
            out[i, m + j] = bit
    return out[:, m:]


@njit(cache=True, nogil=True)
def _descrambled(word: NDArray[np.uint8], delays: NDArray[np.int64], history: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Return x[n] = y[n] + sum of y[n - d]."""
    m, n = len(history), word.shape[1]
    out = np.empty(word.shape, np.uint8)
    for i in range(word.shape[0]):
        row, to = word[i], out[i]
        to[:] = row
        for d in delays:
            for j in range(min(d, n)):
                to[j] ^= history[m - d + j]
            off = np.uint64(d)
            for j in range(n - d):
                at = np.uint64(j)
                to[at + off] ^= row[at]
    return out


@dataclass(frozen=True, slots=True, kw_only=True)
class Scramble(Step):
    """A self-synchronising (multiplicative) scrambler: every bit is added to bits sent before it.

    The receiver needs no seed once the register is full; a wrong bit on the air is wrong once more at every tap.
    Source: ITU-T V.34, clause 7, and its definition.
    """

    name: ClassVar[str] = "scramble"
    role = "order"

    poly: Annotated[str | int, Doc('exponents are delays, "x^17 + x^12 + 1": added are the bits 12 and 17 before')]
    seed: Annotated[int, Ge(0), Doc("bits on the air before the first, the latest least significant")] = 0

    def __post_init__(self) -> None:
        m = max(self._delays)
        if self.seed >> m:
            raise ParameterError("seed", found=hex(self.seed), expected=f"at most {m} bits",
                                 fix=f"give the {m} bits of the register")

    @property
    def _delays(self) -> tuple[int, ...]:
        mirrored = delays_of(self.poly)
        m = max(mirrored)
        return tuple(sorted({m, *(m - d for d in mirrored if d != m)}))

    @property
    def _history(self) -> Bits:
        m = max(self._delays)
        return np.array([self.seed >> (m - 1 - j) & 1 for j in range(m)], np.uint8)

    def coded_bits(self, k: int) -> int:
        return k

    def data_bits(self, n: int) -> int:
        return n

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        return _scrambled(np.ascontiguousarray(data), np.array(self._delays), self._history)

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        return _descrambled(np.ascontiguousarray(word), np.array(self._delays), self._history), None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        doubt = batch.doubt
        if doubt is not None:
            worst = doubt.copy()
            for d in self._delays:
                worst[:, d:] = np.maximum(worst[:, d:], doubt[:, : max(doubt.shape[1] - d, 0)])
            doubt = worst
        return whole(batch, self.strip(batch.bits)[0], doubt)
