"""Syndrome decoding of short binary codewords, many to a frame."""

import numpy as np
from numba import njit
from numpy.typing import NDArray


@njit(cache=True, nogil=True)
def correct(
    bits: NDArray[np.uint8], n: int, columns: NDArray[np.uint64], word_syndrome: NDArray[np.uint64],
    syndromes: NDArray[np.uint64],
    leaders: NDArray[np.uint64], weights: NDArray[np.int8], out: NDArray[np.uint8],
    repaired: NDArray[np.int32], worst: NDArray[np.int8], given_up: NDArray[np.bool_],
) -> None:
    """Correct every codeword to the coset leader of its syndrome.

    bits      uint8 (frame, words * n); out the same, filled with corrected words
    columns   uint64 (n,)  syndrome of an error at each position
    word_syndrome  uint64 (2**n,) syndrome of a whole word, first bit most significant, or empty
    syndromes ascending table of correctable syndromes; empty: leaders and weights are indexed by syndrome
    leaders   error pattern, bit j (least significant) at position j; weights its weight, -1: none
    repaired  bits changed per frame; worst: most errors in one codeword; given_up: a syndrome without leader
    """
    dense = len(syndromes) == 0
    for i in range(bits.shape[0]):
        row, fixed = bits[i], out[i]
        for j in range(len(row)):
            fixed[j] = row[j]
        for first in range(0, len(row), n):
            s = np.uint64(0)
            if len(word_syndrome):
                value = 0
                for j in range(n):
                    value = value << 1 | row[first + j]
                s = word_syndrome[value]
            else:
                for j in range(n):
                    if row[first + j]:
                        s ^= columns[j]
            if s == 0:
                continue
            at = np.int64(s)
            if not dense:
                at = np.searchsorted(syndromes, s)
                if at >= len(syndromes) or syndromes[at] != s:
                    given_up[i] = True
                    continue
            if weights[at] < 0:
                given_up[i] = True
                continue
            pattern = leaders[at]
            for j in range(n):
                if (pattern >> np.uint64(j)) & np.uint64(1):
                    fixed[first + j] ^= np.uint8(1)
            repaired[i] += weights[at]
            worst[i] = max(worst[i], weights[at])


@njit(cache=True, nogil=True)
def multiply(data: NDArray[np.uint8], k: int, generator: NDArray[np.uint8], table: NDArray[np.uint8]
             ) -> NDArray[np.uint8]:
    """Return the codewords of frames of k-bit data words: uint8 (frame, words * n).

    generator  uint8 (k, n); table uint8 (2**k, n) of all codewords, or empty for a large k
    """
    frames, width = data.shape
    n = generator.shape[1]
    words = width // k
    out = np.zeros((frames, words * n), np.uint8)
    for i in range(frames):
        for w in range(words):
            if len(table):
                value = 0
                for b in range(k):
                    value = value << 1 | data[i, w * k + b]
                for j in range(n):
                    out[i, w * n + j] = table[value, j]
            else:
                for b in range(k):
                    if data[i, w * k + b]:
                        for j in range(n):
                            out[i, w * n + j] ^= generator[b, j]
    return out
