"""Long rows of bits to frames: an air frame that holds several, or a piece of a stream.

The outermost step that cuts finds where frames stand in the bits that the steps outside it have undone. Each
frame is decoded on its own; then the row is put right where frames were repaired, encoded again by the
outer steps and compared with what was received: that gives the channel errors of every frame.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.bits import unpack_rows
from pcaptool.coding.chain import Chain, Outcome
from pcaptool.coding.step import OK, SHORT, Batch, Bits, Context

Doubt = NDArray[np.uint8] | None
SOFT_LEVELS = {"signed-8": 127, "signed-4": 7}      # largest value of a soft bit


def air_bits(buffer: NDArray[np.uint8], start: NDArray[np.int64], n_bytes: int, soft: str, one: str
             ) -> tuple[Bits, Doubt]:
    """Return the bits of air frames, uint8 (frame, bit), and the doubt about them where they come soft.

    soft  "": eight hard bits a byte; "signed-8": a two's complement value a bit; "signed-4": two a byte, the
          first in the upper half
    one   the sign of a value that stands for 1: "negative" or "positive"
    The doubt falls from 255 at value 0 to 0 at the largest value.
    """
    if not soft:
        return unpack_rows(buffer, start, n_bytes), None
    octets = buffer[start[:, None] + np.arange(n_bytes)]
    if soft == "signed-8":
        values = octets.view(np.int8).astype(np.int16)
    else:
        halves = np.stack([octets >> 4, octets & 15], axis=2).reshape(len(start), 2 * n_bytes).astype(np.int16)
        values = np.where(halves > 7, halves - 16, halves)
    bits = (values < 0) if one == "negative" else (values > 0)
    most = SOFT_LEVELS[soft]
    sure = np.minimum(np.abs(values), most).astype(np.float32)
    return bits.astype(np.uint8), (255 - np.rint(sure * (255 / most))).astype(np.uint8)


@dataclass(slots=True)
class Cut:
    """Frames found in long rows.

    row, begin, size  int64 (frame,)  where each stood: its row, first bit on the air, bits on the air
    outcome           what became of them; error positions count from the frame's first bit on the air
    """

    row: NDArray[np.int64]
    begin: NDArray[np.int64]
    size: NDArray[np.int64]
    outcome: Outcome


class Cutter:
    """A chain split at its outermost step that cuts."""

    def __init__(self, chain: Chain) -> None:
        at = max(i for i, step in enumerate(chain.steps) if step.cuts)
        self.step = chain.steps[at]
        self.inner = Chain(chain.steps[: at + 1])
        self.outer = chain.steps[at + 1 :]

    def ratio(self) -> int:
        """Return how many bits on the air make one bit in which frames are found, rounded."""
        n = 2520
        for step in self.outer:
            n = step.coded_bits(n)
        return max(round(n / 2520), 1)

    def cut(self, air: Bits, doubt: Doubt, context: Context) -> Cut:
        """Find and decode the frames in rows of one length."""
        batch, sides = Batch(air, doubt), []
        for step in reversed(self.outer):
            decoded = step.decode(batch, context)
            if (decoded.fault == SHORT).any():
                return _nothing()
            batch = Batch(np.ascontiguousarray(decoded.bits), decoded.doubt)
            sides.append(decoded.side)
        bits = batch.bits
        n, air_n = bits.shape[1], air.shape[1]
        row, begin, end = self.step.find(bits, np.full(len(bits), n, np.int64))
        if not len(row):
            return _nothing()
        width = int((end - begin).max())
        column = np.minimum(begin[:, None] + np.arange(width), n - 1)
        words = bits[row[:, None], column]
        unsure = None if batch.doubt is None else batch.doubt[row[:, None], column]
        own = {name: values[row] for name, values in context.items()}
        outcome = self.inner.decode(words, end - begin, own, unsure)
        first = begin * air_n // n
        last = -(-end * air_n // n)
        if self.outer:
            outcome = self._on_the_air(air, bits, sides[::-1], context, outcome, row, begin, first, last)
        return Cut(row, first, last - first, outcome)

    def _on_the_air(self, air: Bits, bits: Bits, sides: list[Bits | None], context: Context, outcome: Outcome,
                    row: NDArray[np.int64], begin: NDArray[np.int64], first: NDArray[np.int64],
                    last: NDArray[np.int64]) -> Outcome:
        """Return the outcome with channel errors counted on the air, outside all steps."""
        mended = bits.copy()
        of = outcome.error_frame
        mended[row[of], begin[of] + outcome.error_position] ^= 1
        for step, side in zip(self.outer, sides, strict=True):
            mended = step.encode(mended, context, side)
        wrong = mended[:, : air.shape[1]] != air
        before = np.concatenate([np.zeros((len(air), 1), np.int64), np.cumsum(wrong, axis=1)], axis=1)
        usable = outcome.reason == OK
        count = (before[row, last] - before[row, first]).astype(np.int32)
        frames = np.flatnonzero(usable & (count > 0))
        places = [np.flatnonzero(wrong[row[f], first[f] : last[f]]) for f in frames]
        return replace(
            outcome, wrong_bits=np.where(usable, count, -1).astype(np.int32),
            error_frame=np.repeat(frames, count[frames]),
            error_position=np.concatenate([np.zeros(0, np.int64), *places]).astype(np.int32))


def _nothing() -> Cut:
    none = np.zeros(0, np.int64)
    return Cut(none, none, none, Outcome(
        np.zeros((0, 0), np.uint8), none, np.zeros(0, np.uint8), np.zeros(0, np.int32), np.zeros(0, np.float32), none,
        np.zeros(0, np.int32)))
