"""Frames between flags, with zeros stuffed in so that no flag occurs within: HDLC."""

from dataclasses import dataclass
from typing import Annotated, ClassVar

import numpy as np
from annotated_types import Ge, Le
from numba import njit
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.step import (
    NO_CONTEXT,
    SHORT,
    Batch,
    Bits,
    Context,
    Decoded,
    LengthError,
    Step,
    whole,
)

HEAD = 32       # bits of ``side`` that say how many bits stand before the opening flag


@njit(cache=True, nogil=True)
def next_frame(row: NDArray[np.uint8], at: int, n: int, run: int, least: int) -> tuple[int, int, int]:
    """Return (begin of the opening flag, begin of the closing flag, data bits) of the next frame; begin -1: none.

    A flag is a 0, run + 1 ones and a 0; one flag may close a frame and open the next, and two may share a 0.
    More ones than that abort a frame. Frames of fewer than ``least`` data bits are passed over.
    """
    ones, opened, data = 0, -1, 0
    for p in range(at, n):
        if row[p]:
            ones += 1
            if ones <= run:
                data += 1
            elif ones > run + 1:
                opened = -1
            continue
        if ones == run + 1:
            flag = p - run - 2
            data -= run + 1                         # the flag's 0 and its first ones were counted
            if flag >= at and row[flag] == 0:
                if opened >= 0 and data >= least:
                    return opened, flag, data
                opened, data = flag, 0
        elif ones != run:                           # a 0 behind just ``run`` ones was stuffed
            data += 1
        ones = 0
    return -1, -1, 0


@njit(cache=True, nogil=True)
def all_frames(bits: NDArray[np.uint8], length: NDArray[np.int64], run: int, least: int) -> NDArray[np.int64]:
    """Return (row, begin of the opening flag, end of the closing one) of every frame: int64 (frame, 3)."""
    room = 64
    out = np.empty((room, 3), np.int64)
    count = 0
    for i in range(bits.shape[0]):
        at = 0
        while True:
            begin, closing, _ = next_frame(bits[i], at, length[i], run, least)
            if begin < 0:
                break
            if count == room:
                more = np.empty((2 * room, 3), np.int64)
                more[:room] = out
                out, room = more, 2 * room
            out[count, 0], out[count, 1], out[count, 2] = i, begin, closing + run + 3
            count += 1
            at = closing
    return out[:count]


@njit(cache=True, nogil=True)
def stuff(data: NDArray[np.uint8], run: int, out: NDArray[np.uint8]) -> NDArray[np.int64]:
    """Put a 0 behind every ``run`` ones: rows of ``out`` are filled; return the bits of each."""
    size = np.zeros(data.shape[0], np.int64)
    for i in range(data.shape[0]):
        n, ones = 0, 0
        for j in range(data.shape[1]):
            out[i, n] = data[i, j]
            n += 1
            ones = ones + 1 if data[i, j] else 0
            if ones == run:
                out[i, n] = 0
                n += 1
                ones = 0
        size[i] = n
    return size


@njit(cache=True, nogil=True)
def first_frames(bits: NDArray[np.uint8], run: int, least: int, data: NDArray[np.uint8], length: NDArray[np.int64],
                 side: NDArray[np.uint8], side_length: NDArray[np.int64], found: NDArray[np.bool_],
                 kept: NDArray[np.int64]) -> None:
    """Undo the stuffing of the first frame of every row.

    data, length       filled: its data bits
    side, side_length  filled: HEAD bits that say how many stand before the opening flag, these, and what stands
                       behind the closing flag
    kept               int64, as data, or no rows: filled with the column that each data bit came from
    """
    for i in range(bits.shape[0]):
        width = bits.shape[1]
        begin, closing, _ = next_frame(bits[i], 0, width, run, least)
        found[i] = begin >= 0
        length[i], side_length[i] = 0, HEAD
        if begin < 0:
            continue
        n, ones = 0, 0
        for p in range(begin + run + 3, closing):
            if bits[i, p] == 0 and ones == run:
                ones = 0
                continue
            ones = ones + 1 if bits[i, p] else 0
            data[i, n] = bits[i, p]
            if len(kept):
                kept[i, n] = p
            n += 1
        length[i] = n
        for k in range(HEAD):
            side[i, k] = np.uint8(begin >> (HEAD - 1 - k) & 1)
        n = HEAD
        for p in range(width):
            if p < begin or p >= closing + run + 3:
                side[i, n] = bits[i, p]
                n += 1
        side_length[i] = n


@njit(cache=True, nogil=True)
def rebuilt(side: NDArray[np.uint8], stuffed: NDArray[np.uint8], size: NDArray[np.int64], flag: NDArray[np.uint8],
            out: NDArray[np.uint8]) -> None:
    """Fill rows with what stood before, flag, stuffed data, flag, what stood behind."""
    for i in range(out.shape[0]):
        before = 0
        for k in range(HEAD):
            before = before << 1 | side[i, k]
        n = 0
        for k in range(before):
            out[i, n] = side[i, HEAD + k]
            n += 1
        for bit in flag:
            out[i, n] = bit
            n += 1
        for k in range(size[i]):
            out[i, n] = stuffed[i, k]
            n += 1
        for bit in flag:
            out[i, n] = bit
            n += 1
        for k in range(HEAD + before, side.shape[1]):
            out[i, n] = side[i, k]
            n += 1


@dataclass(frozen=True, slots=True, kw_only=True)
class BitStuffing(Step):
    """A frame between flags 0 1..1 0, a 0 stuffed in behind every run of ones. Source: ISO/IEC 13239, 4.

    The stuffed length depends on the data: behind the closing flag the line is idle, more flags as far as they
    fit, up to the longest that the data could have become. The first frame in the air frame is taken.
    """

    name: ClassVar[str] = "bit_stuffing"
    role = "frame"

    run: Annotated[int, Ge(2), Le(30), Doc("ones behind which a 0 is stuffed; a flag has one more")] = 5
    opening: Annotated[int, Ge(1), Le(255), Doc("flags sent before a frame")] = 1
    least: Annotated[int, Ge(1), Doc("data bits of the shortest frame; what is shorter is idle line")] = 16

    @property
    def linear(self) -> bool:
        return False

    @property
    def cuts(self) -> bool:
        return True

    @property
    def flag(self) -> Bits:
        return np.array([0, *[1] * (self.run + 1), 0], np.uint8)

    def coded_bits(self, k: int) -> int:
        if k < self.least:
            raise LengthError(f"{k} bits are fewer than the {self.least} of the shortest frame")
        return (self.opening + 1) * (self.run + 3) + k + k // self.run

    def data_bits(self, n: int) -> int:
        """Return the most data bits that fit into n bits whatever they are, but not fewer than the shortest frame."""
        if n < 2 * (self.run + 3) + self.least:
            raise LengthError(f"{n} bits are too few for two flags and {self.least} bits between them")
        k = max((n - (self.opening + 1) * (self.run + 3)) * self.run // (self.run + 1) - 1, self.least)
        while self.coded_bits(k + 1) <= n:
            k += 1
        return k

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        frames, k = data.shape
        longest = self.coded_bits(max(k, self.least))
        stuffed = np.zeros((frames, longest), np.uint8)
        size = stuff(np.ascontiguousarray(data), self.run, stuffed)
        flag = self.flag
        if side is None:
            opening = np.tile(flag, self.opening)
            out = np.tile(np.tile(flag, longest // len(flag) + 2)[:longest], (frames, 1))
            for value in np.unique(size):
                rows = size == value
                end = len(opening) + value
                out[rows, : len(opening)] = opening
                out[np.ix_(rows, np.arange(len(opening), end))] = stuffed[rows, :value]
                idle = np.tile(flag, longest // len(flag) + 2)[: longest - end]
                out[np.ix_(rows, np.arange(end, longest))] = idle
            return out
        width = int(side.shape[1] - HEAD + 2 * len(flag) + (size.max() if frames else k))
        out = np.zeros((frames, width), np.uint8)
        rebuilt(np.ascontiguousarray(side), stuffed, size, flag, out)
        return out

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        bits = np.ascontiguousarray(batch.bits)
        frames, width = bits.shape
        data, side = np.zeros((frames, width), np.uint8), np.zeros((frames, HEAD + width), np.uint8)
        length, side_length = np.zeros(frames, np.int64), np.zeros(frames, np.int64)
        found = np.zeros(frames, np.bool_)
        kept = np.zeros((frames if batch.doubt is not None else 0, width), np.int64)
        first_frames(bits, self.run, self.least, data, length, side, side_length, found, kept)
        doubt = None if batch.doubt is None else np.take_along_axis(batch.doubt, kept, axis=1)
        out = whole(batch, data, doubt, side=side, side_length=side_length)
        out.length = length
        out.fault[~found] = SHORT
        return out

    def find(self, bits: Bits, length: NDArray[np.int64]) -> tuple[
            NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
        found = all_frames(np.ascontiguousarray(bits), length, self.run, self.least)
        return found[:, 0], found[:, 1], found[:, 2]

