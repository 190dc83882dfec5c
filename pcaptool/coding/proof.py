"""Prove air frames undamaged without decoding them.

An undamaged air frame is one that its own message, encoded again, reproduces to the last bit. For a
chain of linear steps that comparison is an affine map over GF(2) of the received bits: the residual
r(x) = x + encode(strip(x)). It is all zero exactly for undamaged frames. The map is found by feeding
the plain steps the zero frame and every unit frame, reduced to independent rows by Gaussian
elimination, and stored as one table of 256 entries for each byte of the frame, so that a frame costs
one table look-up and a few XORs a byte, whatever the chain. Nothing is left to chance: the residual
is exact, not hashed.

Where the innermost steps are not linear (an arithmetic checksum), the proof covers the outer, linear
ones and hands their data on.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

from pcaptool.coding.chain import Chain
from pcaptool.coding.step import Bits, LengthError

LARGEST = 4096      # bits of an air frame; longer ones are decoded straight away
LANES = 4           # 64-bit words that one table entry holds side by side


@njit(cache=True, nogil=True)
def prove(
    buffer: NDArray[np.uint8],
    start: NDArray[np.int64],
    n_bytes: int,
    tables: NDArray[np.uint64],
    constant: NDArray[np.uint64],
    residual_words: int,
    undamaged: NDArray[np.bool_],
    data: NDArray[np.uint64],
) -> None:
    """Decide for every frame whether its residual is zero, and give its data bits.

    buffer     uint8 (byte,); a frame begins at each start and has n_bytes bytes
    tables     uint64 (block, n_bytes * 256 * LANES), entry [byte, value, lane] of each block in a row
    constant   uint64 (block, LANES)
    undamaged  bool (frame,), filled
    data       uint64 (frame, word), filled for undamaged frames
    Unsigned indices spare the check for negative ones, half the time of this loop.
    """
    for i in range(len(start)):
        first = np.uint64(start[i])
        bad = np.uint64(0)
        for block in range(len(tables)):
            table = tables[block]
            w0, w1, w2, w3 = constant[block, 0], constant[block, 1], constant[block, 2], constant[block, 3]
            base = np.uint64(0)
            for p in range(n_bytes):
                at = base + (np.uint64(buffer[first + np.uint64(p)]) << np.uint64(2))
                w0 ^= table[at]
                w1 ^= table[at + np.uint64(1)]
                w2 ^= table[at + np.uint64(2)]
                w3 ^= table[at + np.uint64(3)]
                base += np.uint64(256 * LANES)
            word = block * 4 - residual_words
            if word < 0:
                bad |= w0
            else:
                data[i, word] = w0
            if word + 1 < 0:
                bad |= w1
            else:
                data[i, word + 1] = w1
            if word + 2 < 0:
                bad |= w2
            else:
                data[i, word + 2] = w2
            if word + 3 < 0:
                bad |= w3
            else:
                data[i, word + 3] = w3
            if bad != 0:
                break
        undamaged[i] = bad == 0


def _independent(rows: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """Return a basis of the row space of bit-packed rows: Gaussian elimination over GF(2)."""
    rows = rows[rows.any(axis=1)].copy()
    basis = []
    while len(rows):
        pivot = rows[0].copy()
        word = int(np.flatnonzero(pivot)[0])
        low = pivot[word] & (~pivot[word] + np.uint64(1))
        hit = (rows[:, word] & low) != 0
        rows[hit] ^= pivot
        basis.append(pivot)
        rows = rows[rows.any(axis=1)]
    return np.array(basis, np.uint64).reshape(len(basis), -1)


def _pack(bits: Bits) -> NDArray[np.uint64]:
    """Pack rows of bits into 64-bit words; bit j goes to word j // 64, bit j % 64."""
    n, width = bits.shape
    padded = np.zeros((n, -(-width // 64) * 64), np.uint8)
    padded[:, :width] = bits
    return np.packbits(padded, axis=1, bitorder="little").view("<u8").astype(np.uint64)


@dataclass(frozen=True)
class Proof:
    """The compiled proof for air frames of one length in one context.

    inner   steps chain.steps[:inner] are left to be decoded; 0: the data is the message
    width   bits of the data behind the proven steps
    words   64-bit words of data per frame: data bit wanted[j] at word j // 64, bit j % 64
    """

    inner: int
    width: int
    words: int
    residual_words: int
    tables: NDArray[np.uint64]
    constant: NDArray[np.uint64]

    @property
    def nbytes(self) -> int:
        return self.tables.nbytes

    def run(
        self, buffer: NDArray[np.uint8], start: NDArray[np.int64]
    ) -> tuple[NDArray[np.bool_], NDArray[np.uint64]]:
        """Return (undamaged bool (frame,), data uint64 (frame, words))."""
        undamaged = np.empty(len(start), np.bool_)
        data = np.empty((len(start), self.tables.shape[0] * LANES - self.residual_words), np.uint64)
        n_bytes = self.tables.shape[1] // (256 * LANES)
        prove(buffer, start, n_bytes, self.tables, self.constant, self.residual_words, undamaged, data)
        return undamaged, data

    def data_bits(self, data: NDArray[np.uint64]) -> Bits:
        """Return data words of a proof of all data (wanted None) as uint8 (frame, bit)."""
        as_bytes = np.ascontiguousarray(data[:, : self.words]).astype("<u8").view(np.uint8)
        return np.unpackbits(as_bytes, axis=1, bitorder="little")[:, : self.width]


def linear_from(chain: Chain) -> int:
    """Return the least i such that chain.steps[i:] are all linear."""
    inner = len(chain.steps)
    while inner and chain.steps[inner - 1].linear:
        inner -= 1
    return inner


def compile_proof(
    chain: Chain, air_bytes: int, wanted: Sequence[int] | None = None, context: Mapping[str, int] | None = None
) -> Proof | None:
    """Compile the proof for air frames of air_bytes bytes; None where no proof exists.

    wanted   data bits to give for undamaged frames, in the order to store them; -1 leaves a bit 0;
             a position past the data also gives 0; None: all data bits
    context  values of the wrapper fields that the chain needs
    """
    n = air_bytes * 8
    inner = linear_from(chain)
    outer = chain.steps[inner:]
    if not 0 < n <= LARGEST or not outer:
        return None
    probes = np.zeros((n + 1, n), np.uint8)     # the zero frame, then every unit frame
    probes[1:][np.diag_indices(n)] = 1
    values = {name: np.full(n + 1, value, np.int64) for name, value in (context or {}).items()}
    bits, sides = probes, []
    try:
        for step in reversed(outer):
            step.data_bits(bits.shape[1])
            bits, side = step.strip(bits, values)
            sides.append(side)
        data = bits
        for step, side in zip(outer, reversed(sides), strict=True):
            bits = step.encode(bits, values, side)
    except LengthError:
        return None
    if bits.shape != probes.shape:
        return None
    residual = bits ^ probes
    functionals = np.hstack([(residual ^ residual[0])[1:].T, residual[0][:, None]])    # a.x + c
    basis = _independent(_pack(functionals))
    rows = np.unpackbits(basis.view(np.uint8), axis=1, bitorder="little")[:, : n + 1]
    if len(rows) and not rows[:, :n].any(axis=1).all():
        return None                             # 0 = 1: no frame of this length is undamaged
    positions = np.arange(data.shape[1]) if wanted is None else np.asarray(wanted, np.int64)
    taken = np.zeros((len(positions), n + 1), np.uint8)
    there = (positions >= 0) & (positions < data.shape[1])
    chosen = data[:, positions[there]]
    taken[there, :n] = (chosen ^ chosen[0])[1:].T
    taken[there, n] = chosen[0]
    residual_words = -(-len(rows) // 64)
    words = -(-len(positions) // 64)
    lanes = -(-(residual_words + words) // LANES) * LANES
    outputs = np.zeros((lanes * 64, n + 1), np.uint8)
    outputs[: len(rows)] = rows
    outputs[residual_words * 64 : residual_words * 64 + len(taken)] = taken
    columns = _pack(outputs.T)                  # (input bit or constant, lane)
    unit = columns[:n].reshape(air_bytes, 8, lanes)[:, ::-1]    # unit[p, k]: bit of value 1 << k
    tables = np.zeros((air_bytes, 256, lanes), np.uint64)
    for k in range(8):
        tables[:, 1 << k : 2 << k] = tables[:, : 1 << k] ^ unit[:, k : k + 1]
    blocked = tables.reshape(air_bytes, 256, lanes // LANES, LANES).transpose(2, 0, 1, 3)
    return Proof(inner, data.shape[1], words, residual_words, blocked.reshape(lanes // LANES, -1),
                 columns[n].reshape(lanes // LANES, LANES))
