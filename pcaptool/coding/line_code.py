"""Line codes: how bits become levels on the line, and code violations."""

from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, ClassVar, Literal

import numpy as np
from annotated_types import Ge, Le
from numba import njit
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.bits import numbers_of, octet_at
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

# Four bits as six of which three are 1; EN 13757-4, table of the "3 out of 6" code, from memory.
THREE_OF_SIX = (0x16, 0x0D, 0x0E, 0x0B, 0x1C, 0x19, 0x1A, 0x13, 0x2C, 0x25, 0x26, 0x23, 0x34, 0x31, 0x32, 0x29)
ERASED = np.uint8(255)
BROKEN = 0x80           # mark of a word that is not of the code


@njit(cache=True, nogil=True)
def _levels(data: NDArray[np.uint8], toggle_on: int, level: int) -> NDArray[np.uint8]:
    """Return levels that change where a bit is ``toggle_on``: uint8, the same shape."""
    out = np.empty(data.shape, np.uint8)
    for i in range(data.shape[0]):
        now = np.uint8(level)
        for j in range(data.shape[1]):
            now ^= np.uint8(data[i, j] == toggle_on)
            out[i, j] = now
    return out


@njit(cache=True, nogil=True)
def _halves(word: NDArray[np.uint8], invert: int, data: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Fill data with the first halves; return, in one number, whether any bit has two equal halves."""
    unequal, flip, two, one = np.uint8(1), np.uint8(invert), np.uint64(2), np.uint64(1)
    for i in range(data.shape[0]):
        row, to = word[i], data[i]
        for j in range(data.shape[1]):
            at = np.uint64(j)
            first = row[two * at]
            to[at] = first ^ flip
            unequal &= first ^ row[two * at + one]
    return np.full(1, unequal ^ np.uint8(1), np.uint8)


@njit(cache=True, nogil=True)
def _differences(word: NDArray[np.uint8], level: int, invert: int, data: NDArray[np.uint8]) -> None:
    """Fill data with the changes of level from bit to bit, inverted or not."""
    flip, one = np.uint8(invert), np.uint64(1)
    for i in range(data.shape[0]):
        row, to = word[i], data[i]
        for j in range(data.shape[1] - 1):
            at = np.uint64(j)
            to[at + one] = row[at + one] ^ row[at] ^ flip
        if data.shape[1]:
            to[0] = row[0] ^ np.uint8(level) ^ flip


@njit(cache=True, nogil=True)
def _begins(word: NDArray[np.uint8], level: int, invert: int, data: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Fill data with the changes of level at the begin of every bit of two halves, inverted or not.

    Returns, in one number, whether any bit has two equal halves.
    """
    unequal, flip, one, two = np.uint8(1), np.uint8(invert), np.uint64(1), np.uint64(2)
    for i in range(data.shape[0]):
        row, to = word[i], data[i]
        for j in range(data.shape[1] - 1):
            at = np.uint64(j)
            to[at + one] = row[two * at + two] ^ row[two * at + one] ^ flip
            unequal &= row[two * at] ^ row[two * at + one]
        if data.shape[1]:
            to[0] = row[0] ^ np.uint8(level) ^ flip
            unequal &= row[len(row) - 2] ^ row[len(row) - 1]
    return np.full(1, unequal ^ np.uint8(1), np.uint8)


@njit(cache=True, nogil=True)
def _sixes(word: NDArray[np.uint8], nibble: NDArray[np.uint32], data: NDArray[np.uint32]) -> NDArray[np.uint32]:
    """Fill data, four bits in a number for every six; return, in one number, whether any was no word of the code.

    nibble  uint32 (64,)  the four bits as bytes, and BROKEN where the word is not of the code
    """
    seen, bits = np.uint32(0), np.uint32(0x01010101)
    for i in range(data.shape[0]):
        row, to = word[i], data[i]
        last = data.shape[1] - 1
        for g in range(last):                       # eight bits are read, six of them used
            four = nibble[octet_at(row, 6 * g) >> np.uint64(2)]
            to[np.uint64(g)] = four & bits
            seen |= four
        if last >= 0:
            value = 0
            for j in range(6 * last, 6 * last + 6):
                value = value << 1 | row[j]
            four = nibble[value]
            to[last] = four & bits
            seen |= four
    return np.full(1, seen & np.uint32(BROKEN), np.uint32)


@lru_cache(maxsize=1)
def _nearest() -> NDArray[np.uint32]:
    """Return for words of six bits the nibble of the nearest 3-out-of-6 word, as four bytes; BROKEN if it is none."""
    distance = np.array([[(word ^ code).bit_count() for code in THREE_OF_SIX] for word in range(64)])
    best = distance.argmin(axis=1).astype(np.uint8)
    four = np.stack([best >> j & 1 for j in (3, 2, 1, 0)], axis=1).astype(np.uint8)
    nibble: NDArray[np.uint32] = four.view(np.uint32)[:, 0] | np.where(distance.min(axis=1) > 0, np.uint32(BROKEN), 0)
    return nibble.astype(np.uint32)


@dataclass(frozen=True, slots=True, kw_only=True)
class LineCode(Step):
    """A line code. What cannot have been sent is read as the nearest that can, and erased for the decoder behind.

    Source: IEEE 802.3 and IEEE 802.5 (Manchester, differential Manchester), EN 13757-4 (3 out of 6); NRZI and
    differential coding by their definitions.
    """

    name: ClassVar[str] = "line_code"
    role = "order"

    kind: Annotated[Literal["manchester", "differential_manchester", "nrzi", "differential", "three_of_six"],
                    Doc("nrzi: the level changes for a bit of toggle_on; differential: for a 1; "
                        "differential_manchester: it changes in the middle of every bit, and at its begin for "
                        "toggle_on")]
    one: Annotated[Literal["01", "10"],
                   Doc('manchester: what a 1 is sent as; "01" as in IEEE 802.3, "10" the other convention')] = "01"
    toggle_on: Annotated[Literal[0, 1], Doc("nrzi, differential_manchester: the bit that changes the level")] = 0
    level: Annotated[int, Ge(0), Le(1), Doc("the level before the first bit, where levels change")] = 0

    @property
    def linear(self) -> bool:
        return self.kind != "three_of_six"

    @property
    def period(self) -> int:
        return self._ratio[1]

    @property
    def _changes(self) -> int:
        """The bit that changes the level."""
        return 1 if self.kind == "differential" else self.toggle_on

    @property
    def _ratio(self) -> tuple[int, int]:
        """Data bits and the bits on the air that they become."""
        return {"manchester": (1, 2), "differential_manchester": (1, 2), "three_of_six": (4, 6)}.get(self.kind, (1, 1))

    def coded_bits(self, k: int) -> int:
        data, air = self._ratio
        if k % data:
            raise LengthError(f"{k} bits are no whole number of groups of {data} for the line code {self.kind}")
        return k // data * air

    def data_bits(self, n: int) -> int:
        data, air = self._ratio
        if n % air:
            raise LengthError(f"{n} bits are no whole number of symbols of {air} bits of the line code {self.kind}")
        return n // air * data

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        n = self.coded_bits(data.shape[1])
        if self.kind in ("nrzi", "differential"):
            return _levels(np.ascontiguousarray(data), self._changes, self.level)
        out = np.empty((len(data), n), np.uint8)
        if self.kind == "three_of_six":
            words = np.array(THREE_OF_SIX, np.uint8)[numbers_of(data.reshape(len(data), data.shape[1] // 4, 4))]
            return _bits(words, 6).reshape(len(data), n)
        if self.kind == "manchester":
            out[:, 0::2] = data if self.one == "10" else data ^ 1
        else:   # the middle of every bit changes the level once more: half a bit on, it is that of twice as many bits
            steps = np.empty((len(data), n), np.uint8)
            steps[:, 0::2] = data == self.toggle_on
            steps[:, 1::2] = 1
            return _levels(steps, 1, self.level)
        out[:, 1::2] = out[:, 0::2] ^ 1
        return out

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        self.data_bits(word.shape[1])
        return self._read(word)[0], None

    def _read(self, word: Bits) -> tuple[Bits, bool]:
        """Return (data, whether there is a violation), by a map that is affine where there is none."""
        word = np.ascontiguousarray(word)
        data = np.empty((len(word), word.shape[1] // self._ratio[1]), np.uint8)
        if self.kind == "manchester":
            return data, bool(_halves(word, self.one == "01", data)[0])
        if self.kind == "differential_manchester":
            return data, bool(_begins(word, self.level, 1 - self.toggle_on, data)[0])
        _differences(word, self.level, 1 - self._changes, data)
        return data, False

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        word, doubt = batch.bits, batch.doubt
        if word.shape[1] % self._ratio[1]:
            return too_short(batch)
        if self.kind == "three_of_six":
            return self._three_of_six(batch)
        data, violated = self._read(word)
        if self.kind in ("nrzi", "differential"):
            if doubt is not None:
                worst = doubt.copy()
                worst[:, 1:] = np.maximum(worst[:, 1:], doubt[:, :-1])
                doubt = worst
            return whole(batch, data, doubt)
        if not violated and doubt is None:
            return whole(batch, data)
        first, second = word[:, 0::2], word[:, 1::2]
        broken = first == second
        if self.kind == "differential_manchester":      # the next bit is measured against the second half
            broken[:, 1:] |= word[:, 0:-2:2] == word[:, 1:-2:2]
        if doubt is None:
            return whole(batch, data, np.where(broken, ERASED, np.uint8(0)))
        of_first, of_second = doubt[:, 0::2], doubt[:, 1::2]
        if self.kind == "manchester":
            data = np.where(broken & (of_second < of_first), data ^ 1, data)   # the surer half decides
        apart = np.abs(of_first.astype(np.int16) - of_second).astype(np.uint8)
        own = np.where(first == second, ERASED - apart, np.minimum(of_first, of_second))
        if self.kind == "differential_manchester":
            own[:, 1:] = np.maximum(own[:, 1:], own[:, :-1].copy())
        return whole(batch, data, own)

    def _three_of_six(self, batch: Batch) -> Decoded:
        word = np.ascontiguousarray(batch.bits)
        groups = word.shape[1] // 6
        data = np.empty((len(word), 4 * groups), np.uint8)
        if not _sixes(word, _nearest(), data.view(np.uint32))[0] and batch.doubt is None:
            return whole(batch, data)
        if batch.doubt is None:
            six = numbers_of(word.reshape(len(word), groups, 6))
            unsure = np.where(_nearest()[six] & BROKEN, ERASED, np.uint8(0))
            return whole(batch, data, unsure.repeat(4, axis=1))
        return self._weighed(batch, groups)

    def _weighed(self, batch: Batch, groups: int) -> Decoded:
        """Take the word nearest by the sure bits; the doubt falls with the distance of the next best."""
        came = batch.bits.reshape(len(batch.bits), groups, 6)
        sure = 255 - batch.doubt.reshape(came.shape).astype(np.int32)       # type: ignore[union-attr]
        codes = (np.array(THREE_OF_SIX)[:, None] >> np.arange(5, -1, -1) & 1).astype(np.uint8)
        distance = np.stack([((came != code) * sure).sum(axis=2) for code in codes], axis=2)
        best = distance.argmin(axis=2).astype(np.uint8)
        least = np.sort(distance, axis=2)[:, :, :2]
        unsure = (255 - np.minimum(least[:, :, 1] - least[:, :, 0], 255)).astype(np.uint8)
        return whole(batch, _bits(best, 4).reshape(len(came), groups * 4), unsure.repeat(4, axis=1))


def _bits(numbers: NDArray[np.uint8], size: int) -> Bits:
    """Return numbers as bits, first bit most significant: uint8 (frame, group, size)."""
    return (numbers[:, :, None] >> np.arange(size - 1, -1, -1, dtype=np.uint8) & 1).astype(np.uint8)
