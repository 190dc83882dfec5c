"""The one contract of all coding steps.

A step is a frozen dataclass of parameters with the verbs ``encode`` and ``decode``. Both work on
batches of words that all have the same length; the chain groups frames by length before it calls a
step, so a step never sees padding. Bits are uint8, 0 or 1, one array element each, in the order
sent.

The rules of the contract, checked for every registered step by ``tests/coding/test_contract.py``:
inputs are never changed, an empty batch gives an empty batch, any split of a batch gives the same
rows, ``decode(encode(data))`` gives ``data`` without fault, and for linear steps
``strip(encode(data))`` gives ``data``.
"""

from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar, Literal

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.strength import NOTHING, Codewords, Strength

Bits = NDArray[np.uint8]

# Faults that a step can find, by increasing precedence when several steps find one.
OK, CHECK_FAILED, UNCORRECTABLE, SHORT = 0, 1, 2, 3

# Wrapper fields that a step asked for by name in ``needs``: int64 (frame,)
Context = Mapping[str, NDArray[np.int64]]
NO_CONTEXT: Context = {}


class ParameterError(ValueError):
    """Parameters of a step that cannot work together; ``key`` names the one to change."""

    def __init__(self, key: str, *, found: str, expected: str, fix: str) -> None:
        super().__init__(f"{key}: found {found}, expected {expected}; fix: {fix}")
        self.key, self.found, self.expected, self.fix = key, found, expected, fix


class LengthError(ValueError):
    """A word length that the step can neither make nor undo."""


@dataclass(slots=True)
class Batch:
    """Received words of one length.

    bits   uint8 (frame, bit)          hard decisions
    doubt  uint8 (frame, bit) or None  0 sure .. 255 erased; None when every bit is sure
    """

    bits: Bits
    doubt: NDArray[np.uint8] | None = None


@dataclass(slots=True)
class Decoded:
    """What a step made of a batch.

    bits      uint8 (frame, bit)           data with the step undone
    doubt     uint8 (frame, bit) or None   as in Batch, for the data
    length    int64 (frame,) or None       leading columns of ``bits`` that count, where they differ
    fault     uint8 (frame,)               OK, CHECK_FAILED, UNCORRECTABLE or SHORT
    repaired  int32 (frame,)               bits of the word that the step changed
    headroom  float32 (frame,) or None     worst codeword: 1 - errors / t; None: step corrects nothing
    side      uint8 (frame, bit) or None   what the word held besides data and redundancy (ignored
                                           pad bits, bits before a sync word, trailing bits); given
                                           back to ``encode`` so that it can rebuild the word
    side_length int64 (frame,) or None     columns of ``side`` that count, where they differ
    """

    bits: Bits
    doubt: NDArray[np.uint8] | None
    length: NDArray[np.int64] | None
    fault: NDArray[np.uint8]
    repaired: NDArray[np.int32]
    headroom: NDArray[np.float32] | None = None
    side: Bits | None = None
    side_length: NDArray[np.int64] | None = None


class Step(ABC):
    """Base of all coding steps; subclasses are ``@dataclass(frozen=True, slots=True, kw_only=True)``.

    name    the word in the profile, ``step = "..."``
    role    check: finds errors; code: repairs them; order: rearranges or masks bits;
            frame: says where a frame begins or ends
    linear  ``encode`` is affine over GF(2) for a given data length and context, and ``strip`` is too
    needs   wrapper fields whose values ``encode`` and ``decode`` look up in their context
    period  bits on the air after which the step repeats; a stream may begin anywhere between
    cuts    ``find`` cuts long rows, which hold several words or a piece of a stream, into words
    """

    __slots__ = ()
    name: ClassVar[str]
    role: ClassVar[Literal["check", "code", "order", "frame"]]

    @property
    def linear(self) -> bool:
        return True

    @property
    def period(self) -> int:
        return 1

    @property
    def cuts(self) -> bool:
        return False

    @property
    def needs(self) -> tuple[str, ...]:
        return ()

    @abstractmethod
    def coded_bits(self, k: int) -> int:
        """Return the word length for k data bits; raise LengthError when there is none."""

    @abstractmethod
    def data_bits(self, n: int) -> int:
        """Return the data length of an undamaged word of n bits that fills its frame exactly.

        Raises LengthError when the step makes no word of that length.
        """

    @abstractmethod
    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        """Return the words for a batch of data of one length; raise LengthError if it cannot be.

        data  uint8 (frame, k); side as ``decode`` returned it, cut to one length, or None
        """

    @abstractmethod
    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        """Undo the step. A word length that cannot be undone is fault SHORT, never an exception."""

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        """Return (data, side) of undamaged words, by an affine map; linear steps only.

        Garbage in is garbage out: the caller proves the word undamaged by
        ``encode(data, context, side) == word``.
        """
        raise TypeError(f"step {self.name} is not linear")


    def strength(self, k: int) -> Strength:
        """Return what the step can do for k data bits; raise LengthError as ``coded_bits`` does."""
        return NOTHING

    def codewords(self, n: int) -> Codewords | None:
        """Return where the codewords lie in a word of n bits; None where the step is no block code."""
        return None

    def find(self, bits: Bits, length: NDArray[np.int64]) -> tuple[
            NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
        """Return (row, begin, end) of every whole word in long rows, int64 (word,), ordered; steps that cut only.

        bits uint8 (row, bit), of which the first ``length`` count. ``decode`` undoes each word on its own.
        """
        raise TypeError(f"step {self.name} does not cut")


def whole(batch: Batch, bits: Bits, doubt: NDArray[np.uint8] | None = None, **rest: Any) -> Decoded:
    """Return a Decoded without faults or repairs, for steps that only move bits."""
    n = len(batch.bits)
    return Decoded(bits, doubt, None, np.zeros(n, np.uint8), np.zeros(n, np.int32), **rest)


def too_short(batch: Batch) -> Decoded:
    """Return a Decoded that says SHORT for every frame."""
    n = len(batch.bits)
    empty = np.zeros((n, 0), np.uint8)
    return Decoded(empty, None, None, np.full(n, SHORT, np.uint8), np.zeros(n, np.int32))
