"""Convolutional codes, also punctured, tail-biting, recursive; Viterbi decoding with hard or soft decisions."""

from dataclasses import dataclass
from functools import lru_cache, reduce
from typing import Annotated, ClassVar, Literal

import numpy as np
from annotated_types import Ge, Le
from numba import njit
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.cyclic import greatest_common_divisor
from pcaptool.coding.differences import count_differences
from pcaptool.coding.field import polynomial_text
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
from pcaptool.coding.strength import Strength
from pcaptool.coding.trellis import branch_outputs, free_distance
from pcaptool.coding.viterbi_kernel import ANY, SPREAD, viterbi

Octal = int | str
LEVELS = 7              # most steps of a soft decision's weight: as many as a signed 4-bit one has
WHOLE = 16384           # steps of a frame up to which it is decoded in one piece
SEGMENT = 4096          # steps of the pieces of a longer one ...
OVERLAP = 24            # ... which overlap by so many constraint lengths at either end
NO_WEIGHT = np.zeros((0, 0), np.uint8)


def octal(value: Octal) -> int:
    """Return a generator written in octal: "171", or the number 0o171."""
    return int(value, 8) if isinstance(value, str) else value


@njit(cache=True, nogil=True)
def recursive_inputs(data: NDArray[np.uint8], feedback: int, memory: int, tail: int) -> NDArray[np.uint8]:
    """Return the bits that enter the register of a recursive encoder: uint8 (frame, bit + tail).

    Each is a data bit plus the parity of the register bits that ``feedback`` taps; a tail drives it to zero.
    """
    frames, k = data.shape
    out = np.zeros((frames, k + tail), np.uint8)
    taps = feedback & ((1 << memory) - 1)
    for i in range(frames):
        state = np.int64(0)
        for t in range(k):
            back, parity = state & taps, 0
            while back:
                parity ^= 1
                back &= back - 1
            entering = data[i, t] ^ np.uint8(parity)
            out[i, t] = entering
            state = (state >> 1) | np.int64(entering) << (memory - 1)
    return out


@njit(cache=True, nogil=True)
def weights_of(doubt: NDArray[np.uint8], worth: int) -> NDArray[np.uint8]:
    """Return what decisions are worth, 0 to worth, the nearest to worth (255 - doubt) / 255; the same shape.

    Division by 255 as (t + t / 256) / 256, exact here; Warren, Hacker's Delight, 2nd edition, 10-17.
    """
    out = np.empty(doubt.shape, np.uint8)
    w, half, by = np.uint16(worth), np.uint16(128), np.uint16(8)
    for i in range(doubt.shape[0]):
        row, to = doubt[i], out[i]
        for j in range(doubt.shape[1]):
            t = np.uint16(np.uint16(np.uint16(255) - row[j]) * w + half)
            to[j] = np.uint8(np.uint16(t + (t >> by)) >> by)
    return out


@njit(cache=True, nogil=True)
def encode_path(register: NDArray[np.uint8], ages: NDArray[np.int64], first: NDArray[np.int64],
                inverted: NDArray[np.uint8], out: NDArray[np.uint8]) -> None:
    """Fill the output bits, uint8 (frame, step * n), of bits that enter the register one by one.

    register  uint8 (frame, memory + step)  the first ``memory`` were there before
    ages      int64, first int64 (n + 1,)  generator b taps the bits ages[first[b] : first[b + 1]] steps old
    inverted  uint8 (n,)
    """
    n = len(inverted)
    steps = out.shape[1] // n
    memory = register.shape[1] - steps
    parity = np.empty(steps, np.uint8)
    for i in range(register.shape[0]):
        row, to = register[i], out[i]
        for b in range(n):
            parity[:] = inverted[b]
            for k in range(first[b], first[b + 1]):
                off = np.uint64(memory - ages[k])
                for t in range(steps):
                    at = np.uint64(t)
                    parity[at] ^= row[at + off]
            place, stride = np.uint64(b), np.uint64(n)
            for t in range(steps):
                to[place] = parity[np.uint64(t)]
                place += stride


@lru_cache(maxsize=32)
def _free_distance(generators: tuple[int, ...], puncture: tuple[str, ...]) -> int:
    return free_distance(generators, puncture)


@dataclass(frozen=True, slots=True, kw_only=True)
class Convolutional(Step):
    """A convolutional code of rate 1/n, or more by puncturing, decoded to the most likely path.

    What a decision is worth is taken from the doubt about it, in steps of a seventh; erasures are worth
    nothing. A frame of more than 16384 steps is decoded in overlapping pieces. There is no headroom: a
    convolutional code has no fixed number of errors that it corrects, and its decoder never gives up.
    Source: Elias (1955); Viterbi (1967); octal generators as in the standards, the present bit leftmost.
    """

    name: ClassVar[str] = "convolutional"
    role = "code"

    constraint_length: Annotated[int, Ge(3), Le(15), Doc("K: register bits, the present one included")]
    generators: Annotated[tuple[Octal, ...], Doc('one for each output bit, in the order sent: octal as "171" or 0o171')]
    tail: Annotated[Literal["zero", "biting", "none", "stream"],
                    Doc("zero: K - 1 zero bits follow the data; biting: the register begins with the last data; "
                        "none: begins with zeros, ends anywhere; stream: begins and ends anywhere")] = "zero"
    inverted: Annotated[tuple[int, ...], Doc("1 for each generator whose output is sent inverted; default none")] = ()
    puncture: Annotated[tuple[str, ...],
                        Doc('one row for each generator, a column for each step: "1" sent, "0" left out')] = ()
    feedback: Annotated[Octal, Doc("of a recursive code, octal; a generator equal to it gives the data bits")] = 0

    def __post_init__(self) -> None:
        K, n = self.constraint_length, len(self.generators)
        if not 2 <= n <= 8:
            raise ParameterError("generators", found=f"{n} of them", expected="2 to 8: one for each output bit",
                                 fix="list the generators in the order in which their bits are sent")
        for i, g in enumerate((*self.generators, self.feedback)):
            key = f"generators[{i}]" if i < n else "feedback"
            try:
                value = octal(g)
            except ValueError:
                raise ParameterError(key, found=repr(g), expected="octal digits",
                                     fix='write for example "171"') from None
            if value.bit_length() > K or (i < n and value < 1):
                raise ParameterError(key, found=f"{value:o} octal, {value.bit_length()} bits",
                                     expected=f"1 to K = {K} bits", fix="check the generator, or constraint_length")
        if max(self._taps).bit_length() < K:
            raise ParameterError("constraint_length", found=str(K),
                                 expected=f"{max(self._taps).bit_length()}, the bits of the longest generator",
                                 fix="generators are written with the present bit leftmost; check K")
        if self.inverted and (len(self.inverted) != n or set(self.inverted) - {0, 1}):
            raise ParameterError("inverted", found=str(list(self.inverted)), expected=f"{n} values, 0 or 1",
                                 fix="give one for each generator")
        if self.puncture:
            widths = {len(row) for row in self.puncture}
            if len(self.puncture) != n or len(widths) != 1 or set("".join(self.puncture)) - {"0", "1"}:
                raise ParameterError("puncture", found=f"{len(self.puncture)} rows of {sorted(widths)} columns",
                                     expected=f"{n} rows of equal length, 0 and 1: one for each generator",
                                     fix='write for example ["101", "110"]')
            if any(not any(row[j] == "1" for row in self.puncture) for j in range(widths.pop())):
                raise ParameterError("puncture", found="a column without a 1", expected="a bit sent in every step",
                                     fix="check the pattern, column by column")
        common = reduce(greatest_common_divisor, self._taps)
        common //= common & -common                 # a factor x only delays
        if common > 1 and not self.feedback:
            raise ParameterError("generators", found=f"a common factor {polynomial_text(common)}",
                                 expected="none: with it, few wrong bits can make data wrong without end",
                                 fix="check the generators; such a code is called catastrophic")
        if self.feedback:
            if not octal(self.feedback) >> (K - 1) & 1:
                raise ParameterError("feedback", found=f"{octal(self.feedback):o} octal",
                                     expected=f"the present bit tapped: K = {K} bits", fix="check the polynomial")
            if octal(self.feedback) not in self._taps:
                raise ParameterError("generators", found="none equal to feedback",
                                     expected="one, which gives the data bits of a systematic code",
                                     fix="list the feedback polynomial where the data bit is sent")
            if self.tail in ("biting", "stream"):
                raise ParameterError("tail", found=f"{self.tail} with feedback", expected='"zero" or "none"',
                                     fix="a recursive register's begin cannot be told from the data's end")
        if (K + 7) * n > 254:
            raise ParameterError("generators", found=f"{n} with K = {K}", expected="(K + 7) n of at most 254",
                                 fix="take fewer generators or a smaller K")

    @property
    def linear(self) -> bool:
        return False            # affine, but not worth a proof: what it is used on hardly comes undamaged

    @property
    def period(self) -> int:
        return sum(row.count("1") for row in self._pattern)

    @property
    def _taps(self) -> tuple[int, ...]:
        return tuple(octal(g) for g in self.generators)

    @property
    def _pattern(self) -> tuple[str, ...]:
        return self.puncture or ("1",) * len(self.generators)

    @property
    def memory(self) -> int:
        """Bits of a state, K - 1."""
        return self.constraint_length - 1

    @property
    def free_distance(self) -> int:
        """Least number of sent bits in which two paths differ."""
        return _free_distance(self._taps, self._pattern)

    def _sent(self, steps: int) -> NDArray[np.bool_]:
        """Return which output bits are sent: bool (steps * n,)."""
        pattern = np.array([[c == "1" for c in row] for row in self._pattern])
        return pattern[:, np.arange(steps) % pattern.shape[1]].T.reshape(-1)

    def _sent_bits(self, steps: int) -> int:
        columns = [sum(row[j] == "1" for row in self._pattern) for j in range(len(self._pattern[0]))]
        turns, rest = divmod(steps, len(columns))
        return turns * sum(columns) + sum(columns[:rest])

    @property
    def _tail_bits(self) -> int:
        return self.memory if self.tail == "zero" else 0

    def coded_bits(self, k: int) -> int:
        if k < 1 or (self.tail == "biting" and k < self.memory):
            raise LengthError(f"{k} data bits are too few for a convolutional code of K = {self.constraint_length}")
        return self._sent_bits(k + self._tail_bits)

    def data_bits(self, n: int) -> int:
        each = sum(row.count("1") for row in self._pattern)
        steps = n // each * len(self._pattern[0])
        while self._sent_bits(steps) < n:
            steps += 1
        if self._sent_bits(steps) != n:
            raise LengthError(f"{n} bits are no whole number of steps of a convolutional code")
        k = steps - self._tail_bits
        self.coded_bits(k)
        return k

    def strength(self, k: int) -> Strength:
        d = self.free_distance
        return Strength(f"K = {self.constraint_length}, free distance {d}: corrects {(d - 1) // 2} wrong bits that are "
                        "far from others; accepts every word")

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        k = data.shape[1]
        self.coded_bits(k)
        if self.feedback:
            inputs = recursive_inputs(np.ascontiguousarray(data), octal(self.feedback), self.memory, self._tail_bits)
        else:
            inputs = np.pad(data, ((0, 0), (0, self._tail_bits))) if self._tail_bits else data
        if side is not None:
            before = side
        elif self.tail == "biting":
            before = data[:, k - self.memory :]
        else:
            before = np.zeros((len(data), self.memory), np.uint8)
        return self._outputs(np.concatenate([before, inputs], axis=1))

    def _outputs(self, register: Bits) -> Bits:
        """Return the sent bits; ``register`` has the K - 1 bits that were there before in front."""
        frames, steps, n = len(register), register.shape[1] - self.memory, len(self.generators)
        out = np.empty((frames, steps * n), np.uint8)
        ages = [[age for age in range(self.constraint_length) if g >> (self.memory - age) & 1] for g in self._taps]
        encode_path(np.ascontiguousarray(register), np.array(sum(ages, [])), np.cumsum([0, *map(len, ages)]),
                    np.array(self.inverted or (0,) * n, np.uint8), out)
        return out[:, self._sent(steps)] if self.puncture else out

    def _parity(self, register: Bits, taps: int) -> Bits:
        """Return the parity of the tapped bits at every step; the leftmost tap is the present bit."""
        steps = register.shape[1] - self.memory
        out = np.zeros((len(register), steps), np.uint8)
        for age in range(self.constraint_length):
            if taps >> (self.memory - age) & 1:
                out ^= register[:, self.memory - age : self.memory - age + steps]
        return out

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        try:
            k = self.data_bits(batch.bits.shape[1])
        except LengthError:
            return too_short(batch)
        bits, steps = np.ascontiguousarray(batch.bits), k + self._tail_bits
        weight, worth = NO_WEIGHT, 1
        if batch.doubt is not None and batch.doubt.any():
            worth = min(LEVELS, 254 // ((self.constraint_length + 7) * len(self.generators)))
            weight = weights_of(np.ascontiguousarray(batch.doubt), worth)
        inputs, begun, cost = self._paths(bits, weight, worth, steps)
        before = None
        if self.tail == "stream":
            before = (begun[:, None] >> np.arange(self.memory)[None] & 1).astype(np.uint8)
        data = inputs[:, :k]
        if self.feedback:
            zeros = np.zeros((len(bits), self.memory), np.uint8)
            data = self._parity(np.concatenate([zeros, inputs], axis=1), octal(self.feedback))[:, :k]
        data = np.ascontiguousarray(data)
        out = whole(batch, data, None, side=before)
        out.repaired[:] = cost if cost is not None else count_differences(self.encode(data, context, before), bits)
        return out

    def _paths(self, bits: Bits, weight: NDArray[np.uint8], worth: int, steps: int
               ) -> tuple[Bits, NDArray[np.int64], NDArray[np.int64] | None]:
        """Return (register inputs (frame, step), start states, wrong bits where the metric counts them)."""
        n, frames = len(self.generators), len(bits)
        sent = self._sent(steps)
        where = np.where(sent, np.cumsum(sent) - 1, -1)
        outputs = branch_outputs(self._taps, self.inverted or (0,) * n)
        far = self.memory * n * worth + 1
        zero, unknown = np.zeros(frames, np.int64), np.full(frames, ANY)
        start = unknown if self.tail in ("biting", "stream") else zero
        end = zero if self.tail == "zero" else unknown
        states = 1 << self.memory
        if steps > WHOLE:
            return self._pieces(bits, weight, where, outputs, start, end, far, steps)
        inputs, cost, begun = viterbi(bits, weight, where, n, states, outputs, start, end, far, SPREAD)
        if self.tail == "biting":
            self._bite(bits, weight, where, outputs, far, inputs, cost, begun)
        return inputs, begun, None if len(weight) else cost

    def _bite(self, bits: Bits, weight: NDArray[np.uint8], where: NDArray[np.int64], outputs: NDArray[np.uint8],
              far: int, inputs: Bits, cost: NDArray[np.int64], begun: NDArray[np.int64]) -> None:
        """Make the paths end where they began: those that do are most likely; for others every state is tried."""
        ended = inputs[:, inputs.shape[1] - self.memory :].astype(np.int64) @ (1 << np.arange(self.memory))
        states = np.arange(1 << self.memory)
        for row in np.flatnonzero(ended != begun):
            again = np.repeat(bits[row : row + 1], len(states), axis=0)
            worth = np.repeat(weight[row : row + 1], len(states), axis=0) if len(weight) else weight
            paths, costs, _ = viterbi(again, worth, where, len(self.generators), len(states), outputs, states, states,
                                      far, SPREAD)
            best = int(np.argmin(costs))
            inputs[row], cost[row], begun[row] = paths[best], costs[best], best

    def _pieces(self, bits: Bits, weight: NDArray[np.uint8], where: NDArray[np.int64], outputs: NDArray[np.uint8],
                start: NDArray[np.int64], end: NDArray[np.int64], far: int, steps: int
                ) -> tuple[Bits, NDArray[np.int64], None]:
        """Decode long frames in overlapping pieces, side by side.

        Paths merge within a few constraint lengths, so that a piece's middle does not depend on its ends.
        """
        n, frames, states = len(self.generators), len(bits), 1 << self.memory
        margin = OVERLAP * self.constraint_length
        size = SEGMENT + 2 * margin
        full, worth = np.zeros((frames, steps * n), np.uint8), np.zeros((frames, steps * n), np.uint8)
        there = where >= 0
        full[:, there] = bits
        worth[:, there] = weight if len(weight) else 1
        inputs, begun = np.empty((frames, steps), np.uint8), np.zeros(frames, np.int64)
        places = list(range(0, steps, SEGMENT))
        for row in range(frames):
            firsts = [max(0, min(p - margin, steps - size)) for p in places]
            at = np.array(firsts)[:, None] * n + np.arange(size * n)
            starts = np.array([start[row] if f == 0 else ANY for f in firsts])
            ends = np.array([end[row] if f + size >= steps else ANY for f in firsts])
            paths, _, began = viterbi(full[row][at], worth[row][at], np.arange(size * n), n, states, outputs, starts,
                                      ends, far, SPREAD)
            begun[row] = began[0]
            for i, (p, f) in enumerate(zip(places, firsts, strict=True)):
                stop = min(p + SEGMENT, steps)
                inputs[row, p:stop] = paths[i, p - f : stop - f]
        return inputs, begun, None
