"""Prove air frames undamaged without decoding them.

An undamaged air frame is one that its own message, encoded again, reproduces to the last bit. For a
chain of linear steps that comparison is an affine map over GF(2) of the received bits, the residual;
it is all zero exactly for undamaged frames. The map is found by feeding the plain steps the zero frame
and every unit frame (``proof_probe.py``), reduced to independent rows, and stored as look-up tables for
the bytes of the frame (``proof_blocks.py``), so that a frame costs a few look-ups a byte, whatever the
chain. Nothing is left to chance: the residual is exact, not hashed.

Where the innermost steps are not linear (an arithmetic checksum), the proof covers the outer, linear
ones and hands their data on.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.chain import Chain
from pcaptool.coding.proof_blocks import Tables, arrange
from pcaptool.coding.proof_kernel import independent, prove
from pcaptool.coding.proof_probe import probe
from pcaptool.coding.step import Bits

LARGEST = 1 << 14   # bits of an air frame; longer ones are decoded straight away


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
    tables: Tables

    @property
    def nbytes(self) -> int:
        return self.tables.nbytes

    def run(
        self, buffer: NDArray[np.uint8], start: NDArray[np.int64]
    ) -> tuple[NDArray[np.bool_], NDArray[np.uint64]]:
        """Return (undamaged bool (frame,), data uint64 (frame, words), of undamaged frames only)."""
        undamaged = np.empty(len(start), np.bool_)
        data = np.empty((len(start), self.words), np.uint64)
        t = self.tables
        prove(buffer, start, t.positions, t.tables, t.extent, t.constant, t.word, undamaged, data)
        return undamaged, data

    def data_bits(self, data: NDArray[np.uint64]) -> Bits:
        """Return data words of a proof of all data (wanted None) as uint8 (frame, bit)."""
        as_bytes = np.ascontiguousarray(data).astype("<u8").view(np.uint8)
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
    found = probe(outer, n, context or {}, wanted)
    if found is None:
        return None
    residual, data, width = found
    light = np.argsort((residual.octets != 0).sum(axis=1), kind="stable")   # rows of few bytes stay as they are
    residual = residual.take(light)
    kept = np.zeros(len(light), np.bool_)
    if not independent(residual.rows.copy(), residual.constant.copy(), kept):
        return None                             # 0 = 1: no frame of this length is undamaged
    return Proof(inner, width, -(-len(data.rows) // 64), arrange(residual.take(kept), data, air_bytes))
