"""Binary linear block codes as matrices: generator, parity check, right inverse, coset leaders."""

from dataclasses import dataclass
from itertools import combinations
from math import comb

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.bits import take_columns
from pcaptool.coding.block_kernel import correct, multiply
from pcaptool.coding.step import UNCORRECTABLE, Batch, Bits, Decoded, LengthError, too_short, whole

LARGEST_TABLE = 1 << 20
DENSE = 16              # check bits up to which leaders are looked up by the syndrome itself


def reduce_rows(matrix: NDArray[np.uint8]) -> tuple[NDArray[np.uint8], list[int], NDArray[np.uint8]]:
    """Return (reduced row echelon form, pivot columns, transform) of a matrix over GF(2).

    transform @ matrix == reduced (mod 2).
    """
    rows, columns = matrix.shape
    work = np.concatenate([matrix, np.eye(rows, dtype=np.uint8)], axis=1)
    pivots: list[int] = []
    for column in range(columns):
        at = len(pivots)
        hits = np.flatnonzero(work[at:, column])
        if not len(hits):
            continue
        work[[at, at + hits[0]]] = work[[at + hits[0], at]]
        others = np.flatnonzero(work[:, column])
        others = others[others != at]
        work[others] ^= work[at]
        pivots.append(column)
        if len(pivots) == rows:
            break
    return work[:, :columns], pivots, work[:, columns:]


def parity_check(generator: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Return a parity-check matrix H (n - k, n) with generator @ H.T == 0 over GF(2)."""
    k, n = generator.shape
    reduced, pivots, _ = reduce_rows(generator)
    free = [j for j in range(n) if j not in pivots]
    h = np.zeros((n - k, n), np.uint8)
    for row, j in enumerate(free):
        h[row, j] = 1
        h[row, pivots] = reduced[:k, j]
    return h


@dataclass(frozen=True)
class LinearCode:
    """An (n, k) code with bounded-distance decoding up to t errors per codeword."""

    generator: NDArray[np.uint8]    # (k, n)
    right_inverse: NDArray[np.uint8]  # (n, k): codeword @ right_inverse == data
    columns: NDArray[np.uint64]     # (n,) syndromes of single errors
    word_syndrome: NDArray[np.uint64]   # (2**n,) syndromes of whole words, where n is small
    syndromes: NDArray[np.uint64]
    leaders: NDArray[np.uint64]
    weights: NDArray[np.int8]
    t: int
    table: NDArray[np.uint8]        # all codewords by data value, where k is small

    @property
    def n(self) -> int:
        return self.generator.shape[1]

    @property
    def k(self) -> int:
        return self.generator.shape[0]

    def coded_bits(self, k: int) -> int:
        if k % self.k or not k:
            raise LengthError(f"{k} data bits are no whole number of words of {self.k} bits")
        return k // self.k * self.n

    def data_bits(self, n: int) -> int:
        if n % self.n or not n:
            raise LengthError(f"{n} bits are no whole number of codewords of {self.n} bits")
        return n // self.n * self.k

    def encode(self, data: Bits) -> Bits:
        self.coded_bits(data.shape[1])
        return multiply(np.ascontiguousarray(data), self.k, self.generator, self.table)

    def strip(self, word: Bits) -> Bits:
        self.data_bits(word.shape[1])
        if (self.right_inverse.sum(axis=0) == 1).all():         # data bits stand in the codeword
            first = np.arange(0, word.shape[1], self.n)
            places = (first[:, None] + self.right_inverse.argmax(axis=0)).reshape(-1)
            return take_columns(np.ascontiguousarray(word), places)
        return multiply(np.ascontiguousarray(word), self.n, self.right_inverse, np.zeros((0, 0), np.uint8))

    def decode(self, batch: Batch) -> Decoded:
        """Correct up to t errors in every codeword; more are found where the syndrome can tell."""
        frames, width = batch.bits.shape
        if width % self.n or not width:
            return too_short(batch)
        word = np.empty((frames, width), np.uint8)
        repaired = np.zeros(frames, np.int32)
        worst = np.zeros(frames, np.int8)
        given_up = np.zeros(frames, np.bool_)
        correct(np.ascontiguousarray(batch.bits), self.n, self.columns, self.word_syndrome, self.syndromes,
                self.leaders, self.weights, word, repaired, worst, given_up)
        out = whole(batch, self.strip(word))
        out.fault[given_up] = UNCORRECTABLE
        out.repaired[:] = repaired
        out.headroom = (1 - worst / max(self.t, 1)).astype(np.float32)
        return out


def linear_code(generator: NDArray[np.uint8], t: int | None = None) -> LinearCode:
    """Return the code of a generator matrix (k, n) of full rank; t None: all that its distance allows.

    Raises ValueError for rows that are not independent, and for a table beyond LARGEST_TABLE.
    """
    k, n = generator.shape
    if n > 64:
        raise ValueError(f"codewords of {n} bits; at most 64 are decoded by table")
    _, pivots, transform = reduce_rows(generator)
    if len(pivots) < k:
        raise ValueError("rows that are not independent")
    right_inverse = np.zeros((n, k), np.uint8)
    right_inverse[pivots] = transform[: len(pivots)]
    identity = (generator.sum(axis=0) == 1)
    if all(any(identity[j] and generator[b, j] for j in range(n)) for b in range(k)):
        right_inverse[:] = 0                # systematic: take the data bits where they stand
        for b in range(k):
            right_inverse[next(j for j in range(n) if identity[j] and generator[b, j]), b] = 1
    h = parity_check(generator)
    r = n - k
    shift = np.arange(r, dtype=np.uint64)
    columns = (h.T.astype(np.uint64) << shift).sum(axis=1, dtype=np.uint64)
    table = np.zeros((0, n), np.uint8)
    if k <= 12:
        values = np.arange(1 << k)[:, None] >> np.arange(k - 1, -1, -1) & 1
        table = (values @ generator % 2).astype(np.uint8)
    if t is None:
        t = (minimum_distance(generator, table) - 1) // 2
    if sum(comb(n, w) for w in range(1, t + 1)) > LARGEST_TABLE:
        raise ValueError(f"more than {LARGEST_TABLE} error patterns of up to {t} bits")
    found: dict[int, tuple[int, int]] = {}
    for weight in range(1, t + 1):
        for places in combinations(range(n), weight):
            s = pattern = 0
            for j in places:
                s ^= int(columns[j])
                pattern |= 1 << j
            if s == 0 or s in found:
                raise ValueError(f"two patterns of up to {t} errors that look alike: the distance is less "
                                 f"than {2 * t + 1}")
            found[s] = (pattern, weight)
    if r <= DENSE:
        leaders, weights = np.zeros(1 << r, np.uint64), np.full(1 << r, -1, np.int8)
        syndromes = np.zeros(0, np.uint64)
        for s, (pattern, weight) in found.items():
            leaders[s], weights[s] = pattern, weight
    else:
        ordered = sorted(found)
        syndromes = np.array(ordered, np.uint64)
        leaders = np.array([found[s][0] for s in ordered], np.uint64)
        weights = np.array([found[s][1] for s in ordered], np.int8)
    word_syndrome = np.zeros(1 << n if n <= DENSE else 0, np.uint64)
    for j in range(n if len(word_syndrome) else 0):
        bit = 1 << (n - 1 - j)
        word_syndrome.reshape(-1, 2, bit)[:, 1] ^= columns[j]
    return LinearCode(generator, right_inverse, columns, word_syndrome, syndromes, leaders, weights, t, table)


def minimum_distance(generator: NDArray[np.uint8], table: NDArray[np.uint8]) -> int:
    """Return the minimum distance: by listing all codewords of a small k, else by dependent columns of H."""
    if len(table):
        return int(table[1:].sum(axis=1).min())
    h = parity_check(generator)
    columns = [int(v) for v in (h.T.astype(np.uint64) << np.arange(len(h), dtype=np.uint64)).sum(1, dtype=np.uint64)]
    singles = set(columns)
    if 0 in singles:
        return 1
    if len(singles) < len(columns):
        return 2
    pairs = {a ^ b for a, b in combinations(columns, 2)}
    if pairs & singles:
        return 3
    return 4 if len(pairs) < comb(len(columns), 2) else 5


__all__ = ["LinearCode", "linear_code", "minimum_distance", "parity_check", "reduce_rows"]
