"""Binary linear block codes as matrices: generator, parity check, distance, table of error patterns."""

from dataclasses import dataclass
from itertools import chain, combinations
from math import comb

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.bits import take_columns
from pcaptool.coding.block_kernel import multiply, repair, syndromes_of
from pcaptool.coding.differences import count_differences
from pcaptool.coding.step import (
    UNCORRECTABLE,
    Batch,
    Bits,
    Decoded,
    LengthError,
    ParameterError,
    too_short,
    whole,
)

LARGEST_TABLE = 1 << 20
DENSE = 16              # check bits up to which patterns are looked up by the syndrome itself
LISTED = 20             # codes of at most 2**LISTED words are listed to find their weights
PIECE = 1024            # frames worked on at a time, so that they stay in the cache
NO_TABLE = np.zeros((0, 0), np.uint8)
ONES = np.array([byte.bit_count() for byte in range(256)], np.int32)


def reduce_rows(matrix: NDArray[np.uint8]) -> tuple[NDArray[np.uint8], list[int], NDArray[np.uint8]]:
    """Return (reduced row echelon form, pivot columns, transform) of a matrix over GF(2).

    transform @ matrix == reduced (mod 2).
    """
    rows, columns = matrix.shape
    work = np.concatenate([matrix, np.eye(rows, dtype=np.uint8)], axis=1)
    pivots: list[int] = []
    for column in range(columns):
        at = len(pivots)
        if at == rows:
            break
        hits = np.flatnonzero(work[at:, column])
        if not len(hits):
            continue
        work[[at, at + hits[0]]] = work[[at + hits[0], at]]
        others = np.flatnonzero(work[:, column])
        work[others[others != at]] ^= work[at]
        pivots.append(column)
    return work[:, :columns], pivots, work[:, columns:]


def parity_check(generator: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Return a parity-check matrix H (n - k, n) with generator @ H.T == 0 over GF(2)."""
    k, n = generator.shape
    reduced, pivots, _ = reduce_rows(generator)
    free = [j for j in range(n) if j not in pivots]
    h = np.zeros((len(free), n), np.uint8)
    for row, j in enumerate(free):
        h[row, j] = 1
        h[row, pivots] = reduced[: len(pivots), j]
    return h


def generator_of(parity: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Return the systematic generator of the code with parity-check matrix H.

    Check bits are taken from the right: for H = [P | I] the data bits stand in front.
    """
    return np.ascontiguousarray(parity_check(parity[:, ::-1])[::-1, ::-1])


def code_weights(generator: NDArray[np.uint8]) -> dict[int, int] | None:
    """Return the weight distribution {weight: codewords}; None where both code and dual are too large.

    A large code's distribution follows from its dual's. Source: MacWilliams (1963), Bell Syst. Tech.
    J. 42:79-94.
    """
    k, n = generator.shape
    if k <= LISTED:
        return _listed_weights(generator)
    if n - k > LISTED:
        return None
    dual = _listed_weights(parity_check(generator))
    weights = {}
    for w in range(n + 1):
        total = sum(
            count * sum((-1) ** s * comb(d, s) * comb(n - d, w - s) for s in range(min(d, w) + 1))
            for d, count in dual.items())
        if total:
            weights[w] = total >> (n - k)
    return weights


def _listed_weights(generator: NDArray[np.uint8]) -> dict[int, int]:
    packed = np.packbits(generator, axis=1)
    weight = np.zeros(1 << len(generator), np.int32)
    for column in packed.T:
        octets = np.zeros(1, np.uint8)
        for row in column:
            octets = np.concatenate([octets, octets ^ row])
        weight += ONES[octets]
    return {w: int(count) for w, count in enumerate(np.bincount(weight)) if count}


@dataclass(frozen=True, slots=True, eq=False)
class LinearCode:
    """An (n, k) code with bounded-distance decoding of up to t errors per codeword.

    reach  errors and erasures are repaired where 2 errors + erasures <= reach: least distance - 1
    """

    generator: NDArray[np.uint8]      # (k, n)
    codewords: NDArray[np.uint8]      # (2**k, n) by data value, where k is small
    right_inverse: NDArray[np.uint8]  # (n, k): codeword @ right_inverse == data
    places: NDArray[np.int64]         # (k,) where the data bits stand in the codeword, or empty
    columns: NDArray[np.uint64]       # (n,) syndromes of single errors
    tables: NDArray[np.uint64]        # (octet, 256) the same for whole octets
    syndromes: NDArray[np.uint64]
    leaders: NDArray[np.int16]
    weights: NDArray[np.int8]
    t: int
    reach: int
    distance: int | None              # least, where it is known

    @property
    def n(self) -> int:
        return int(self.generator.shape[1])

    @property
    def k(self) -> int:
        return int(self.generator.shape[0])

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
        return multiply(np.ascontiguousarray(data), self.generator, self.codewords)

    def strip(self, word: Bits) -> Bits:
        self.data_bits(word.shape[1])
        if not len(self.places):
            return multiply(np.ascontiguousarray(word), self.right_inverse, NO_TABLE)
        first = np.arange(0, word.shape[1], self.n)
        return take_columns(word, (first[:, None] + self.places).reshape(-1))

    def decode(self, batch: Batch) -> Decoded:
        """Correct up to t errors in every codeword; a syndrome without pattern is UNCORRECTABLE."""
        frames, width = batch.bits.shape
        if width % self.n or not width:
            return too_short(batch)
        data = np.empty((frames, self.data_bits(width)), np.uint8)
        repaired, spent = np.zeros(frames, np.int32), np.zeros(frames, np.int32)
        given_up = np.zeros(frames, np.bool_)
        for begin in range(0, frames, PIECE):
            piece = slice(begin, begin + PIECE)
            bits = np.ascontiguousarray(batch.bits[piece])
            doubt = NO_TABLE if batch.doubt is None else np.ascontiguousarray(batch.doubt[piece])
            word = bits.copy()
            repair(word, doubt, self.n, syndromes_of(bits, self.n, self.tables), self.columns, self.syndromes,
                   self.leaders, self.weights, self.reach, spent[piece], given_up[piece])
            data[piece] = self.strip(word)
            repaired[piece] = count_differences(word, bits)
        out = whole(batch, data)
        out.fault[given_up] = UNCORRECTABLE
        out.repaired[:] = repaired
        if self.t:
            left = np.maximum(1 - spent / (2 * self.t), 0).astype(np.float32)
            left[given_up] = 0
            out.headroom = left
        return out


def linear_code(
    generator: NDArray[np.uint8], t: int | None = None, distance: int | None = None
) -> LinearCode:
    """Return the code of a generator matrix (k, n); t None: all errors that its distance allows.

    distance  least distance, where it is known
    Raises ParameterError for rows that are not independent, a table beyond LARGEST_TABLE, and a t
    that the distance does not allow.
    """
    k, n = generator.shape
    reduced, pivots, transform = reduce_rows(generator)
    if len(pivots) < k or k in (0, n):
        raise ParameterError(
            "generator", found=f"{k} rows of rank {len(pivots)} and {n} columns",
            expected="independent rows, fewer than columns", fix="take out rows that are sums of others")
    if n - k > 64:
        raise ParameterError("generator", found=f"{n - k} check bits", expected="at most 64",
                             fix="decode a shorter code")
    right_inverse = np.zeros((n, k), np.uint8)
    right_inverse[pivots] = transform
    unit = np.flatnonzero(generator.sum(axis=0) == 1)       # columns that carry one data bit unchanged
    standing = {int(generator[:, j].argmax()): j for j in unit[::-1]}
    places = np.array([standing[b] for b in range(k)] if len(standing) == k else [], np.int64)
    if len(places):
        right_inverse[:] = 0
        right_inverse[places, np.arange(k)] = 1
    if distance is None:
        weights = code_weights(generator)
        distance = min(w for w in weights if w) if weights else None
    if t is None:
        if distance is None:
            raise ParameterError("t", found="no t", expected=f"t, for a code as large as ({n},{k})",
                                 fix="set t to the errors that the code corrects per codeword")
        t = (distance - 1) // 2
    columns = _columns(generator)
    syndromes, leaders, pattern_weights = _patterns(columns, n - k, t)
    octets = np.zeros((-(-n // 8), 256), np.uint64)
    for j in range(n):
        size = min(8, n - j // 8 * 8)                   # bits of the octet that holds position j
        octets[j // 8, (np.arange(256) >> (size - 1 - j % 8) & 1) == 1] ^= columns[j]
    codewords = np.zeros((0, n), np.uint8)
    if k <= 12:
        values = np.arange(1 << k)[:, None] >> np.arange(k - 1, -1, -1) & 1
        codewords = (values @ generator % 2).astype(np.uint8)
    reach = 2 * t if distance is None else min(distance - 1, 2 * t + 1)
    return LinearCode(generator, codewords, right_inverse, places, columns, octets, syndromes, leaders,
                      pattern_weights, t, reach, distance)


def _columns(generator: NDArray[np.uint8]) -> NDArray[np.uint64]:
    h = parity_check(generator)
    shift = np.arange(len(h), dtype=np.uint64)
    columns: NDArray[np.uint64] = np.bitwise_or.reduce(h.T.astype(np.uint64) << shift, axis=1)
    return columns


def _patterns(columns: NDArray[np.uint64], r: int, t: int
              ) -> tuple[NDArray[np.uint64], NDArray[np.int16], NDArray[np.int8]]:
    """Return (syndromes, leaders, weights) of all patterns of up to t errors, as ``repair`` takes them."""
    n = len(columns)
    size = sum(comb(n, w) for w in range(t + 1))
    if size > LARGEST_TABLE:
        raise ParameterError("t", found=str(t),
                             expected=f"at most {LARGEST_TABLE} patterns of errors, not {size}",
                             fix="set a lower t; what it does not correct is still found")
    all_syndromes = [np.zeros(1, np.uint64)]
    all_leaders = [np.full((1, t), -1, np.int16)]
    for weight in range(1, t + 1):
        flat = np.fromiter(chain.from_iterable(combinations(range(n), weight)), np.int16)
        wrong = flat.reshape(-1, weight)
        all_syndromes.append(np.bitwise_xor.reduce(columns[wrong], axis=1))
        all_leaders.append(np.pad(wrong, ((0, 0), (0, t - weight)), constant_values=-1))
    found, leaders = np.concatenate(all_syndromes), np.concatenate(all_leaders)
    weights = (leaders >= 0).sum(axis=1).astype(np.int8)
    by_syndrome = np.argsort(found, kind="stable")
    found = found[by_syndrome]
    if (found[1:] == found[:-1]).any():
        raise ParameterError("t", found=str(t), expected=f"a code of distance {2 * t + 1} or more",
                             fix="set a lower t, or check the matrix")
    leaders, weights = np.ascontiguousarray(leaders[by_syndrome]), weights[by_syndrome]
    if r > DENSE:
        return found, leaders, weights
    dense_leaders = np.full((1 << r, t), -1, np.int16)
    dense_weights = np.full(1 << r, -1, np.int8)
    dense_leaders[found.astype(np.int64)] = leaders
    dense_weights[found.astype(np.int64)] = weights
    return np.zeros(0, np.uint64), dense_leaders, dense_weights
