"""The affine maps of a chain, found by probing: what its steps make of the zero frame and of every unit frame.

Each step undone has a residual of its own, word + encode(strip(word)). All of them are zero exactly
when encoding the stripped message through the whole chain gives the frame back, and unlike the
residual of the whole chain they stay as local as the code: a parity bit of a codeword depends on
that codeword alone, however many checks lie inside.
"""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.step import Bits, LengthError, Step

SLAB_BITS = 1 << 20         # bits of the unit frames that are probed together: they stay in the cache


@dataclass(frozen=True, slots=True)
class Functionals:
    """Affine functionals of the bits of a frame: output i is rows[i] . x + constant[i] over GF(2).

    rows      uint64 (output, word)  coefficient of bit j of the frame at word j // 64, bit j % 64
    constant  uint8 (output,)
    """

    rows: NDArray[np.uint64]
    constant: NDArray[np.uint8]

    def take(self, keep: NDArray[np.int64] | NDArray[np.bool_]) -> "Functionals":
        return Functionals(self.rows[keep], self.constant[keep])

    @property
    def octets(self) -> NDArray[np.uint8]:
        """The coefficients as uint8 (output, byte of the frame), first bit of a byte least significant."""
        return self.rows.astype("<u8", copy=False).view(np.uint8)


@dataclass(slots=True)
class _Found:
    """The columns of one output word that depend on the frame, slab by slab of unit frames."""

    zero: Bits
    parts: list[tuple[int, NDArray[np.int64], NDArray[np.uint64]]] = field(default_factory=list)

    def add(self, first: int, bits: Bits) -> None:
        """Take the outputs of a slab of unit frames, of which the first has a one at bit first."""
        change = bits ^ self.zero
        columns = np.flatnonzero(np.bitwise_or.reduce(change, axis=0))
        if len(columns):
            packed = _pack(np.ascontiguousarray(change[:, columns].T))
            self.parts.append((first // 64, columns, packed))

    def functionals(self, n: int, every: bool) -> Functionals:
        """Return the functionals of every column, or of those that are not always zero."""
        used = self.zero[0] != 0
        for _, columns, _ in self.parts:
            used[columns] = True
        chosen = np.arange(len(used)) if every else np.flatnonzero(used)
        place = np.zeros(len(used), np.int64)
        place[chosen] = np.arange(len(chosen))
        rows = np.zeros((len(chosen), -(-n // 64)), np.uint64)
        for word, columns, packed in self.parts:
            rows[place[columns], word : word + packed.shape[1]] = packed
        return Functionals(rows, self.zero[0, chosen])


def _pack(bits: Bits) -> NDArray[np.uint64]:
    """Pack rows of bits into 64-bit words; bit j goes to word j // 64, bit j % 64."""
    n, width = bits.shape
    padded = np.zeros((n, -(-width // 64) * 8), np.uint8)
    padded[:, : -(-width // 8)] = np.packbits(bits, axis=1, bitorder="little")
    return padded.view("<u8").astype(np.uint64, copy=False)


def probe(steps: Sequence[Step], n: int, context: Mapping[str, int],
          wanted: Sequence[int] | None) -> tuple[Functionals, Functionals, int] | None:
    """Return (residuals of all steps, wanted data bits, bits of data) of frames of n bits; None if there are none.

    wanted  data bits in the order to give them; a position outside the data is always 0; None: all data bits
    """
    found: list[_Found] = []
    given = np.zeros(0, np.int64)
    try:
        for bits in _undo(steps, np.zeros((1, n), np.uint8), context):
            found.append(_Found(bits))
        width = found[-1].zero.shape[1]
        positions = np.arange(width) if wanted is None else np.asarray(wanted, np.int64)
        there = (positions >= 0) & (positions < width)
        given = positions[there]
        found[-1].zero = found[-1].zero[:, given]
        slab = max(SLAB_BITS // n // 64, 1) * 64
        for first in range(0, n, slab):
            units = np.zeros((min(slab, n - first), n), np.uint8)
            units[np.arange(len(units)), first + np.arange(len(units))] = 1
            *residuals, data = _undo(steps, units, context)
            for one, bits in zip(found, [*residuals, data[:, given]], strict=True):
                one.add(first, bits)
    except LengthError:
        return None
    parts = [one.functionals(n, every=False) for one in found[:-1]]
    residual = Functionals(np.concatenate([p.rows for p in parts]), np.concatenate([p.constant for p in parts]))
    some = found[-1].functionals(n, every=True)
    rows = np.zeros((len(positions), residual.rows.shape[1]), np.uint64)
    constant = np.zeros(len(positions), np.uint8)
    rows[there], constant[there] = some.rows, some.constant
    return residual, Functionals(rows, constant), width


def _undo(steps: Sequence[Step], bits: Bits, context: Mapping[str, int]) -> Iterator[Bits]:
    """Undo steps on frames; yield the residual of each and at last the data."""
    values = {name: np.full(len(bits), value, np.int64) for name, value in context.items()}
    for step in reversed(steps):
        step.data_bits(bits.shape[1])
        data, side = step.strip(bits, values)
        again = step.encode(data, values, side)
        if again.shape != bits.shape:
            raise LengthError(f"{step.name} makes no word of {bits.shape[1]} bits")
        yield again ^ bits
        bits = data
    yield bits
