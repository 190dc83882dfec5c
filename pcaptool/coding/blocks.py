"""Checks that stand behind the data they cover, once for a frame or once for every block of it.

CRC and arithmetic checksum share this: where the check bits stand and which data bits they cover.
"""

from abc import abstractmethod
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Annotated, Literal

import numpy as np
from annotated_types import Ge
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.step import (
    CHECK_FAILED,
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
from pcaptool.coding.strength import Strength


@dataclass(frozen=True, slots=True, kw_only=True)
class BlockCheck(Step):
    """Base of checks: coverage and place; subclasses compute the check bits."""

    at: Annotated[Literal["end", "start"], Doc("where the check bits stand")] = "end"
    skip: Annotated[int, Ge(0), Doc("first data bits that are not covered")] = 0
    cover: Annotated[int, Ge(0), Doc("data bits covered behind those skipped; 0: all")] = 0
    every: Annotated[int, Ge(0), Doc("octets of data per check; 0: one check for the frame")] = 0
    first: Annotated[int, Ge(0), Doc("octets of the first block, where it differs")] = 0

    role = "check"

    def __post_init__(self) -> None:
        if self.first and not self.every:
            raise ParameterError("first", found=f"{self.first} without every", expected="every set as well",
                                 fix="set every to the size of the later blocks, or leave first out")
        if self.every and (self.skip or self.cover):
            raise ParameterError("every", found="every with skip or cover", expected="one of them",
                                 fix="leave skip and cover out")

    @property
    def octets(self) -> bool:
        """True when the check is defined for whole octets only."""
        return True

    @property
    @abstractmethod
    def check_bits(self) -> int:
        """Number of check bits per block."""

    @abstractmethod
    def compute(self, data: Bits) -> Bits:
        """Return the check bits of covered data: uint8 (frame, check_bits)."""

    def _blocks(self, k: int) -> Iterator[tuple[int, int]]:
        """Yield (begin, end) of the data bits of every block."""
        if not self.every:
            yield 0, k
            return
        begin, size = 0, (self.first or self.every) * 8
        while begin < k:
            yield begin, min(begin + size, k)
            begin, size = begin + size, self.every * 8

    def coded_bits(self, k: int) -> int:
        n = k
        for begin, end in self._blocks(k):
            covered = max(end - begin - self.skip, 0)
            covered = min(covered, self.cover) if self.cover else covered
            if self.octets and covered % 8:
                raise LengthError(f"{self.name} covers {covered} bits, which are no whole octets")
            n += self.check_bits
        return n

    def data_bits(self, n: int) -> int:
        if not self.every:
            k = n - self.check_bits
        else:
            blocks, left, size = 0, n, (self.first or self.every) * 8
            while left > 0:
                blocks, left, size = blocks + 1, left - size - self.check_bits, self.every * 8
            k = n - blocks * self.check_bits
        if k < 0 or self.coded_bits(k) != n:
            raise LengthError(f"{self.name} makes no word of {n} bits")
        return k

    def strength(self, k: int) -> Strength:
        blocks = sum(1 for _ in self._blocks(k))
        each = f" for each of {blocks} blocks" if self.every else ""
        return Strength(f"{self.check_bits} check bits{each}", 2.0 ** (-self.check_bits * blocks))

    def _check_of(self, data: Bits) -> Bits:
        covered = data[:, self.skip : self.skip + self.cover if self.cover else None]
        return self.compute(covered)

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        self.coded_bits(data.shape[1])
        parts = []
        for begin, end in self._blocks(data.shape[1]):
            block = data[:, begin:end]
            pair = [block, self._check_of(block)]
            parts += pair if self.at == "end" else pair[::-1]
        return np.concatenate(parts, axis=1) if parts else data.copy()

    def _cut(self, word: NDArray[np.uint8], k: int) -> Iterator[tuple[NDArray[np.uint8], NDArray[np.uint8]]]:
        """Yield (data bits, check bits) of every block of words that hold k data bits."""
        at, r = 0, self.check_bits
        for begin, end in self._blocks(k):
            size = end - begin
            if self.at == "end":
                yield word[:, at : at + size], word[:, at + size : at + size + r]
            else:
                yield word[:, at + r : at + r + size], word[:, at : at + r]
            at += size + r

    def _data(self, word: NDArray[np.uint8], k: int) -> NDArray[np.uint8]:
        parts = [data for data, _ in self._cut(word, k)]
        return parts[0] if len(parts) == 1 else np.concatenate([word[:, :0], *parts], axis=1)

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        return self._data(word, self.data_bits(word.shape[1])), None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        try:
            k = self.data_bits(batch.bits.shape[1])
        except LengthError:
            return too_short(batch)
        doubt = None if batch.doubt is None else self._data(batch.doubt, k)
        out = whole(batch, self._data(batch.bits, k), doubt)
        for data, check in self._cut(batch.bits, k):
            out.fault[(self._check_of(data) != check).any(axis=1)] = CHECK_FAILED
        return out
