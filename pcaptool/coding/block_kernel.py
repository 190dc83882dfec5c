"""Syndrome decoding of short binary codewords, many to a frame."""

import numpy as np
from numba import njit
from numpy.typing import NDArray

from pcaptool.coding.bits import octet_at


@njit(cache=True, nogil=True)
def syndromes_of(bits: NDArray[np.uint8], n: int, tables: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """Return the syndrome of every codeword: uint64 (frame, word).

    bits    uint8 (frame, words * n)
    tables  uint64 (octet of the codeword, 256)  syndrome of the octet's bits
    """
    out = np.empty((bits.shape[0], bits.shape[1] // n), np.uint64)
    whole = n // 8
    for i in range(bits.shape[0]):
        row = bits[i]
        for w in range(out.shape[1]):
            first = w * n
            s = np.uint64(0)
            for g in range(whole):
                s ^= tables[g, octet_at(row, first + 8 * g)]
            if n % 8:
                rest = np.uint64(0)
                for j in range(first + 8 * whole, first + n):
                    rest = rest << np.uint64(1) | np.uint64(row[j])
                s ^= tables[whole, rest]
            out[i, w] = s
    return out


@njit(cache=True, nogil=True)
def _leader(s: np.uint64, syndromes: NDArray[np.uint64], weights: NDArray[np.int8]) -> np.int64:
    """Return the table row of the error pattern with this syndrome, -1: none."""
    none = np.int64(-1)
    at = np.int64(s)
    if len(syndromes):
        at = np.int64(np.searchsorted(syndromes, s))
        if at >= len(syndromes) or syndromes[at] != s:
            return none
    return at if weights[at] >= 0 else none


@njit(cache=True, nogil=True)
def repair(
    word: NDArray[np.uint8], doubt: NDArray[np.uint8], n: int, received: NDArray[np.uint64],
    columns: NDArray[np.uint64], syndromes: NDArray[np.uint64], leaders: NDArray[np.int16],
    weights: NDArray[np.int8], reach: int, spent: NDArray[np.int32], given_up: NDArray[np.bool_],
) -> None:
    """Correct every codeword, in place, by the error pattern of its syndrome.

    word       uint8 (frame, words * n)  as received; left so where given up
    doubt      the same shape, 255: erased; or no rows
    received   uint64 (frame, word)  syndromes
    columns    uint64 (n,)  syndrome of an error at each position
    syndromes  ascending, of the table rows; empty: rows are indexed by the syndrome itself
    leaders    int16 (row, t) wrong positions, weights[row] of them; weight -1: no pattern; weight 0
               belongs to syndrome 0
    reach      codewords with erased bits are repaired where 2 errors + erasures <= reach
    spent      int32 (frame,), raised: most 2 errors + erasures in one codeword
    given_up   bool (frame,), set: a codeword could not be repaired

    Erasures: decode with all erased bits 0, again with all 1, and keep the result with fewer errors
    elsewhere. One of the two puts at most half of the erased bits wrong. Source: Lin and Costello,
    Error Control Coding, 2nd edition, section 6.8.
    """
    for i in range(word.shape[0]):
        for w in range(received.shape[1]):
            s, at = received[i, w], w * n
            erased = 0
            if len(doubt):
                for j in range(at, at + n):
                    erased += doubt[i, j] == 255
            if s == 0 and erased == 0:
                continue
            if erased == 0:
                best = _leader(s, syndromes, weights)
                if best < 0:
                    given_up[i] = True
                    continue
                fewest = 2 * weights[best]
            else:
                best, fill, fewest = np.int64(-1), 0, reach + 1
                all_erased = np.uint64(0)
                for j in range(n):
                    if doubt[i, at + j] == 255:
                        all_erased ^= columns[j]
                        if word[i, at + j]:
                            s ^= columns[j]                     # as if every erased bit were 0
                for filled in range(2):
                    pattern = _leader(s, syndromes, weights)
                    if pattern >= 0:
                        errors = 0
                        for e in range(weights[pattern]):
                            errors += doubt[i, at + leaders[pattern, e]] != 255
                        if 2 * errors + erased < fewest:
                            best, fill, fewest = pattern, filled, 2 * errors + erased
                    s ^= all_erased
                if best < 0:
                    given_up[i] = True
                    continue
                for j in range(at, at + n):
                    if doubt[i, j] == 255:
                        word[i, j] = fill
            for e in range(weights[best]):
                word[i, at + leaders[best, e]] ^= np.uint8(1)
            spent[i] = max(spent[i], fewest)


@njit(cache=True, nogil=True)
def multiply(data: NDArray[np.uint8], generator: NDArray[np.uint8], table: NDArray[np.uint8]
             ) -> NDArray[np.uint8]:
    """Return the codewords of frames of k-bit data words: uint8 (frame, words * n).

    generator  uint8 (k, n); table uint8 (2**k, n) of all codewords, or empty for a large k
    """
    frames, width = data.shape
    k, n = generator.shape
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
