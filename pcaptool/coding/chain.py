"""A chain of coding steps: encode a message to an air frame, undo that, and find the exact channel errors.

A receiver undoes the transmitter's steps last to first. Where a step leaves frames of different
lengths (a sync word at different places, a length field) they go on in groups of one length, so no
step ever sees padding. A message that came through is encoded again and compared with what was
received: every bit that differs is a channel error, in data, parity, sync word and padding alike.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.differences import count_differences, find_differences
from pcaptool.coding.step import (
    CHECK_FAILED,
    NO_CONTEXT,
    OK,
    SHORT,
    UNCORRECTABLE,
    Batch,
    Bits,
    Context,
    Step,
)

# Why a frame has no usable message. MISCORRECTED: a decoder claimed success and a check disagreed.
MISCORRECTED, BAD_FIELD = 4, 5
REASONS = {
    OK: "",
    CHECK_FAILED: "check_failed",
    UNCORRECTABLE: "uncorrectable",
    SHORT: "short",
    MISCORRECTED: "miscorrected",
    BAD_FIELD: "bad_field",
}


@dataclass(slots=True)
class Outcome:
    """What became of a batch of air frames.

    message         uint8 (frame, bit)   best reading of the message, also of frames with a fault
    length          int64 (frame,)       bits of the message; the columns behind are padding
    reason          uint8 (frame,)       OK or why there is no usable message, a key of REASONS
    wrong_bits      int32 (frame,)       channel errors; -1 unless the message is usable
    headroom        float32 (frame,)     worst codeword: 1 - errors / t; NaN where no step corrects
    error_frame     int64 (error,)       row of each channel error, ascending
    error_position  int32 (error,)       its bit position on the air, from 0
    """

    message: Bits
    length: NDArray[np.int64]
    reason: NDArray[np.uint8]
    wrong_bits: NDArray[np.int32]
    headroom: NDArray[np.float32]
    error_frame: NDArray[np.int64]
    error_position: NDArray[np.int32]


@dataclass(slots=True)
class _Group:
    """Frames of one length on their way back through the chain, with what undoing it has shown."""

    rows: NDArray[np.int64]
    bits: Bits
    doubt: NDArray[np.uint8] | None
    fault: NDArray[np.uint8]
    repaired: NDArray[np.int32]                 # bits changed by error-correcting steps
    headroom: NDArray[np.float32]
    misled: NDArray[np.bool_]                   # a check failed behind a repair
    sides: dict[int, Bits] = field(default_factory=dict)        # step -> what encode wants back
    checks: dict[int, tuple[Bits, Bits]] = field(default_factory=dict)  # failed check -> (word, data)

    def take(self, keep: NDArray[np.bool_]) -> "_Group":
        return _Group(
            self.rows[keep], self.bits[keep], None if self.doubt is None else self.doubt[keep],
            self.fault[keep], self.repaired[keep], self.headroom[keep],
            self.misled[keep], {i: side[keep] for i, side in self.sides.items()},
            {i: (word[keep], data[keep]) for i, (word, data) in self.checks.items()},
        )


def _at(context: Context, rows: NDArray[np.int64]) -> Context:
    return {name: values[rows] for name, values in context.items()} if context else NO_CONTEXT


@dataclass(frozen=True)
class Chain:
    """The coding steps of a profile, in the transmitter's order."""

    steps: tuple[Step, ...]

    @property
    def corrects(self) -> bool:
        """True when some step repairs errors."""
        return any(step.role == "code" for step in self.steps)

    @property
    def checks(self) -> bool:
        """True when some step is an independent check: what was corrected can be verified."""
        return any(step.role == "check" for step in self.steps)

    @property
    def needs(self) -> tuple[str, ...]:
        """Wrapper fields that steps look up, each once."""
        return tuple(dict.fromkeys(name for step in self.steps for name in step.needs))

    def coded_bits(self, k: int) -> int:
        """Return the air length of a message of k bits; raise LengthError when there is none."""
        for step in self.steps:
            k = step.coded_bits(k)
        return k

    def data_bits(self, n: int) -> int:
        """Return the message length of an undamaged air frame of n bits; raise LengthError if none."""
        for step in reversed(self.steps):
            n = step.data_bits(n)
        return n

    def encode(
        self, message: Bits, context: Context = NO_CONTEXT, sides: Mapping[int, Bits] | None = None
    ) -> Bits:
        """Return the air frames of messages of one length: uint8 (frame, bit)."""
        bits = message
        for i, step in enumerate(self.steps):
            bits = step.encode(bits, context, sides.get(i) if sides else None)
        return bits

    def decode(
        self,
        air: Bits,
        length: NDArray[np.int64] | None = None,
        context: Context = NO_CONTEXT,
        doubt: NDArray[np.uint8] | None = None,
    ) -> Outcome:
        """Undo the chain for a batch of received air frames.

        air     uint8 (frame, bit)      as demodulated
        length  int64 (frame,) or None  bits received of each frame; None: all columns
        doubt   uint8 (frame, bit)      confidence, as in Batch
        """
        n = len(air)
        out = _Collector(n)
        whole = _Group(np.arange(n), air, doubt, np.zeros(n, np.uint8), np.zeros(n, np.int32),
                       np.full(n, np.nan, np.float32), np.zeros(n, np.bool_))
        for group in _split(whole, length):
            self._undo(len(self.steps) - 1, group, group.bits, group.rows, context, out)
        return out.outcome()

    def _undo(self, i: int, group: _Group, air: Bits, air_rows: NDArray[np.int64], context: Context,
              out: "_Collector") -> None:
        while i >= 0:
            step = self.steps[i]
            word = group.bits
            decoded = step.decode(Batch(word, group.doubt), _at(context, group.rows))
            group.bits, group.doubt = decoded.bits, decoded.doubt
            fault = decoded.fault
            if step.role == "check" and any(s.role == "code" for s in self.steps[:i]):
                group.checks[i] = (word, decoded.bits)      # judged in _finish, after all correction
                fault = np.where(fault == CHECK_FAILED, OK, fault).astype(np.uint8)
            group.fault = np.maximum(group.fault, fault)
            group.misled = group.misled | ((fault == CHECK_FAILED) & (group.repaired > 0))
            if step.role == "code":
                group.repaired = group.repaired + decoded.repaired
            if decoded.headroom is not None:
                group.headroom = np.fmin(group.headroom, decoded.headroom)
            if decoded.side is not None:
                group.sides[i] = decoded.side
            i -= 1
            short = group.fault == SHORT
            if decoded.length is None and decoded.side_length is None and not short.any():
                continue
            if short.any():
                out.short(group.rows[short])
            for part in _split(group, decoded.length, decoded.side_length, i + 1, ~short):
                self._undo(i, part, air, air_rows, context, out)
            return
        same = len(group.rows) == len(air_rows)
        self._finish(group, air if same else air[np.searchsorted(air_rows, group.rows)], context, out)

    def _finish(self, group: _Group, air: Bits, context: Context, out: "_Collector") -> None:
        """Encode again, judge the checks that stand behind a decoder, and compare."""
        context = _at(context, group.rows)
        bits = group.bits
        reason = group.fault.copy()
        agreed = np.ones(len(bits), np.bool_)
        for i, step in enumerate(self.steps):
            inner = bits
            bits = step.encode(inner, context, group.sides.get(i))
            if i in group.checks:   # holds when only covered bits differ from what was received
                word, data = group.checks[i]
                agreed &= count_differences(bits, word) == count_differences(inner, data)
        if bits.shape[1] != air.shape[1]:       # a wrong reading can be encoded to another length
            bits = _fitted(bits, air.shape[1])
        misled = group.misled | (~agreed & (group.repaired > 0))
        reason[(reason == OK) & ~agreed] = CHECK_FAILED
        reason[(reason == CHECK_FAILED) & misled] = MISCORRECTED
        usable = reason == OK
        wrong = count_differences(bits, air)
        rows = np.flatnonzero(usable & (wrong > 0))
        if len(rows):
            frame, position = find_differences(bits, air, rows, int(wrong[rows].sum()))
        else:
            frame, position = np.zeros(0, np.int64), np.zeros(0, np.int32)
        out.add(group, reason, np.where(usable, wrong, -1).astype(np.int32), group.rows[frame], position)


def _fitted(bits: Bits, width: int) -> Bits:
    return np.ascontiguousarray(np.pad(bits, ((0, 0), (0, max(width - bits.shape[1], 0))))[:, :width])


def _split(group: _Group, length: NDArray[np.int64] | None, side_length: NDArray[np.int64] | None = None,
           side: int = -1, keep: NDArray[np.bool_] | None = None) -> Sequence[_Group]:
    """Return the group in parts of one length of data and of one length of the last side."""
    n = len(group.rows)
    if length is None and side_length is None and keep is None:
        return [group]
    keep = np.ones(n, np.bool_) if keep is None else keep
    lengths = np.full(n, group.bits.shape[1]) if length is None else length
    sides = np.zeros(n, np.int64) if side_length is None else side_length
    parts = []
    for pair in np.unique(np.stack([lengths[keep], sides[keep]], 1), axis=0):
        part = group.take(keep & (lengths == pair[0]) & (sides == pair[1]))
        part.bits = np.ascontiguousarray(part.bits[:, : pair[0]])
        if part.doubt is not None:
            part.doubt = np.ascontiguousarray(part.doubt[:, : pair[0]])
        if side_length is not None:
            part.sides[side] = part.sides[side][:, : pair[1]]
        parts.append(part)
    return parts


class _Collector:
    """Puts the rows of all groups back into the order of the batch."""

    def __init__(self, n: int) -> None:
        self.n = n
        self.parts: list[tuple[NDArray[np.int64], Bits]] = []
        self.reason = np.zeros(n, np.uint8)
        self.wrong_bits = np.full(n, -1, np.int32)
        self.headroom = np.full(n, np.nan, np.float32)
        self.errors: list[tuple[NDArray[np.int64], NDArray[np.int32]]] = []

    def short(self, rows: NDArray[np.int64]) -> None:
        self.reason[rows] = SHORT

    def add(self, group: _Group, reason: NDArray[np.uint8], wrong: NDArray[np.int32],
            error_frame: NDArray[np.int64], error_position: NDArray[np.int32]) -> None:
        self.parts.append((group.rows, group.bits))
        self.reason[group.rows] = reason
        self.wrong_bits[group.rows] = wrong
        self.headroom[group.rows] = group.headroom
        self.errors.append((error_frame, error_position))

    def outcome(self) -> Outcome:
        width = max((bits.shape[1] for _, bits in self.parts), default=0)
        length = np.zeros(self.n, np.int64)
        if len(self.parts) == 1 and len(self.parts[0][0]) == self.n:
            message = self.parts[0][1]
            length[:] = width
        else:
            message = np.zeros((self.n, width), np.uint8)
            for rows, bits in self.parts:
                message[rows, : bits.shape[1]] = bits
                length[rows] = bits.shape[1]
        frame = np.concatenate([e[0] for e in self.errors]) if self.errors else np.zeros(0, np.int64)
        position = np.concatenate([e[1] for e in self.errors]) if self.errors else np.zeros(0, np.int32)
        if len(self.errors) > 1:
            by_frame = np.argsort(frame, kind="stable")
            frame, position = frame[by_frame], position[by_frame]
        return Outcome(message, length, self.reason, self.wrong_bits, self.headroom, frame, position)
