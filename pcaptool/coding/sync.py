"""Find the sync word that stands before the data, tolerating wrong bits; cut a stream at its sync words."""

from dataclasses import dataclass
from math import comb
from typing import Annotated, ClassVar

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
from pcaptool.coding.sync_kernel import all_words, find_word


@dataclass(frozen=True, slots=True, kw_only=True)
class Sync(Step):
    """A sync word at, or within some bits behind, the begin of the word.

    The place with the fewest wrong bits is taken, the earliest of equals. Where none has at most
    ``tolerate`` wrong bits the check fails and the data are read as if it stood at the begin.

    In a stream the words stand ``every`` so many bits. One is believed where the sync word behind it stands
    in its place too, or the stream ends; then frames follow each other in lock. A sync word up to ``slip`` bits
    beside its place is a bit slip, and the lock moves there; up to ``flywheel`` frames in a row are given
    out though their sync word was not recognised.
    """

    name: ClassVar[str] = "sync"
    role = "frame"

    word: Annotated[str, Doc('the word: hex octets, or bits written "0b..."')]
    tolerate: Annotated[int, Ge(0), Doc("wrong bits accepted")] = 0
    within: Annotated[int, Ge(0), Doc("bits that may stand before it")] = 0
    every: Annotated[int, Ge(0), Doc("in a stream: bits from one sync word to the next")] = 0
    slip: Annotated[int, Ge(0), Doc("in a stream: bits by which a word may come early or late")] = 0
    flywheel: Annotated[int, Ge(0), Doc("in a stream: frames in a row whose sync word may be missed")] = 0

    def __post_init__(self) -> None:
        try:
            size = len(self.pattern)
        except ValueError:
            size = 0
        if not size:
            raise ParameterError("word", found=repr(self.word), expected='hex octets or "0b" and bits',
                                 fix='write for example "1ACFFC1D" or "0b11100010010"')
        if 2 * self.tolerate >= size:
            raise ParameterError("tolerate", found=str(self.tolerate),
                                 expected=f"less than half of {size} bits",
                                 fix=f"set at most {(size - 1) // 2}")

        if self.every and self.every <= size + 2 * self.slip:
            raise ParameterError("every", found=str(self.every), expected=f"more than {size + 2 * self.slip}: the word "
                                 "and the slip at either side", fix="count from one sync word's begin to the next")
        if (self.slip or self.flywheel) and not self.every:
            raise ParameterError("every", found="none, with slip or flywheel", expected="the distance of sync words",
                                 fix="set every, or leave slip and flywheel out")

    @property
    def cuts(self) -> bool:
        return self.every > 0

    @property
    def pattern(self) -> Bits:
        """The word's bits: uint8 (bit,)."""
        if self.word.startswith("0b"):
            return np.array([int(c, 2) for c in self.word[2:].replace("_", "")], np.uint8)
        return np.unpackbits(np.frombuffer(bytes.fromhex(self.word), np.uint8))

    def coded_bits(self, k: int) -> int:
        return k + len(self.pattern)

    def data_bits(self, n: int) -> int:
        size = len(self.pattern)
        if n < size:
            raise LengthError(f"{n} bits are fewer than the {size} of the sync word")
        return n - size

    def strength(self, k: int) -> Strength:
        size = len(self.pattern)
        if self.flywheel:
            return Strength(f"{size} bits; a missed word is bridged")
        share = sum(comb(size, i) for i in range(self.tolerate + 1)) / 2.0**size
        anywhere = 1 - (1 - share) ** (self.within + 1)
        return Strength(f"{size} bits, {self.tolerate} may be wrong", anywhere, exact=not self.within)

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        word = np.broadcast_to(self.pattern, (len(data), len(self.pattern)))
        return np.concatenate([word, data] if side is None else [side, word, data], axis=1)

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        self.data_bits(word.shape[1])
        return word[:, len(self.pattern) :], None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        frames, width = batch.bits.shape
        size = len(self.pattern)
        if width < size:
            return too_short(batch)
        places = min(self.within, width - size) + 1
        best, errors = find_word(np.ascontiguousarray(batch.bits), self.pattern, places, self.tolerate)
        missed = best < 0
        best[missed] = 0
        if not best.any():
            out = whole(batch, batch.bits[:, size:], None if batch.doubt is None else batch.doubt[:, size:])
        else:
            data = np.zeros((frames, width - size), np.uint8)
            doubt = None if batch.doubt is None else np.zeros_like(data)
            side = np.zeros((frames, int(best.max())), np.uint8)
            for place in np.unique(best):
                rows = best == place
                length = width - size - place
                data[rows, :length] = batch.bits[rows, place + size :]
                side[rows, :place] = batch.bits[rows, :place]
                if doubt is not None and batch.doubt is not None:
                    doubt[rows, :length] = batch.doubt[rows, place + size :]
            out = whole(batch, data, doubt, side=side, side_length=best)
            out.length = width - size - best
        out.repaired[:] = errors
        if self.flywheel:               # its place is known from the frames before; wrong bits are just that
            lost = np.flatnonzero(missed)
            out.repaired[lost] = (batch.bits[lost, :size] != self.pattern).sum(axis=1)
        else:
            out.fault[missed] = CHECK_FAILED
        return out

    def find(self, bits: Bits, length: NDArray[np.int64]) -> tuple[
            NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
        found = all_words(np.ascontiguousarray(bits), length, self.pattern, self.tolerate, self.every, self.slip,
                          self.flywheel)
        return found[:, 0], found[:, 1], found[:, 1] + self.every
