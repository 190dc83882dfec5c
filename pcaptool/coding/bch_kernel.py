"""Decoding of binary BCH codewords: syndromes, Berlekamp-Massey, Chien search.

Letters: S_j = r(alpha^j) syndromes of the received word r, sigma the error locator polynomial, L its degree.
"""

import numpy as np
from numba import njit
from numpy.typing import NDArray


@njit(cache=True, nogil=True)
def _syndromes(row: NDArray[np.uint8], n: int, octets: NDArray[np.uint16], order: int,
               exp: NDArray[np.uint16], log: NDArray[np.int32], S: NDArray[np.uint16]) -> bool:
    """Fill S[1..2t] of the first n bits of a row, first bit of the highest power; return whether any is not 0.

    octets  uint16 (t, 256)  value of eight bits at alpha^(2i+1), first bit of the power 7
    Horner's rule, an octet at a time, for the odd ones; S_2j = S_j^2.
    """
    any_wrong = False
    for i in range(octets.shape[0]):
        j = 2 * i + 1
        value = np.uint16(0)
        at, left = 0, n % 8
        if left:
            octet = 0
            for b in range(at, at + left):
                octet = octet << 1 | row[b]
            value = octets[i, octet]
            at += left
        up = 8 * j % order
        while at < n:
            octet = 0
            for b in range(at, at + 8):
                octet = octet << 1 | row[b]
            if value:
                value = exp[log[value] + up]
            value ^= octets[i, octet]
            at += 8
        S[j] = value
        any_wrong = any_wrong or value != 0
    if any_wrong:
        for j in range(2, len(S), 2):
            S[j] = exp[2 * log[S[j // 2]] % order] if S[j // 2] else np.uint16(0)
    return any_wrong


@njit(cache=True, nogil=True)
def check_bits(data: NDArray[np.uint8], r: int, table: NDArray[np.uint64]) -> NDArray[np.uint8]:
    """Return the remainder of the data times x^r by the generator: uint8 (codeword, r).

    table  uint64 (256, word)  remainder that an octet leaves, first bit of word 0 the highest power
    """
    words = table.shape[1]
    out = np.empty((data.shape[0], r), np.uint8)
    register = np.zeros(words, np.uint64)
    for i in range(data.shape[0]):
        register[:] = 0
        at, k = 0, data.shape[1]
        while at < k:
            octet = np.uint64(0)
            for b in range(at, at + (8 if (k - at) % 8 == 0 else (k - at) % 8)):
                octet = octet << np.uint64(1) | np.uint64(data[i, b])
            at += 8 if (k - at) % 8 == 0 else (k - at) % 8
            row = (register[0] >> np.uint64(56)) ^ octet
            for w in range(words):
                carry = register[w + 1] >> np.uint64(56) if w + 1 < words else np.uint64(0)
                register[w] = (register[w] << np.uint64(8) | carry) ^ table[row, w]
        for j in range(r):
            out[i, j] = np.uint8(register[j // 64] >> np.uint64(63 - j % 64) & np.uint64(1))
    return out


@njit(cache=True, nogil=True)
def _locator(S: NDArray[np.uint16], t: int, order: int, exp: NDArray[np.uint16], log: NDArray[np.int32],
             sigma: NDArray[np.uint16], B: NDArray[np.uint16], T: NDArray[np.uint16]) -> int:
    """Find sigma, lowest term first, and return L; of a binary code every other discrepancy is 0.

    Source: Berlekamp (1968); Lin and Costello, Error Control Coding, 2nd edition, section 6.4.
    """
    sigma[:] = 0
    B[:] = 0
    sigma[0] = B[0] = 1
    L, before, by, shift = 0, 0, 0, 1
    for step in range(0, 2 * t, 2):
        delta = np.uint16(0)
        for j in range(min(L, step) + 1):
            if sigma[j] and S[step + 1 - j]:
                delta ^= exp[log[sigma[j]] + log[S[step + 1 - j]]]
        if delta == 0:
            shift += 2
            continue
        grows = 2 * L <= step
        if grows:
            for j in range(L + 1):
                T[j] = sigma[j]
        factor = log[delta] - by + (order if log[delta] < by else 0)
        for j in range(min(before, len(sigma) - 1 - shift) + 1):
            if B[j]:
                sigma[j + shift] ^= exp[factor + log[B[j]]]
        if grows:
            for j in range(L + 1):
                B[j] = T[j]
            before, by, shift = L, log[delta], 2
            L = step + 1 - L
        else:
            shift += 2
    return L


@njit(cache=True, nogil=True)
def correct(
    word: NDArray[np.uint8], n: int, extended: bool, even: bool, octets: NDArray[np.uint16], order: int,
    exp: NDArray[np.uint16], log: NDArray[np.int32], errors: NDArray[np.int32],
) -> None:
    """Correct codewords in place.

    word    uint8 (codeword, n + 1)  n bits of the code, then the overall parity bit if extended; more is ignored
    even    all codewords have even weight, since 1 is a root of the generator
    errors  int32 (codeword,)  filled: errors corrected, -1 where it could not be repaired and is left as it came
    """
    t = octets.shape[0]
    S = np.zeros(2 * t + 1, np.uint16)
    sigma, B, T = np.zeros(2 * t + 2, np.uint16), np.zeros(2 * t + 2, np.uint16), np.zeros(2 * t + 2, np.uint16)
    powers, steps = np.zeros(2 * t + 2, np.int64), np.zeros(2 * t + 2, np.int64)
    found = np.zeros(2 * t + 2, np.int64)
    for i in range(word.shape[0]):
        wrong = _syndromes(word[i], n, octets, order, exp, log, S)
        parity = np.uint8(0)
        if extended or even:
            for b in range(n + extended):
                parity ^= word[i, b]
        errors[i] = 0
        if not wrong:
            if parity and (even or t == 0):
                errors[i] = -1
            elif parity:                            # the parity bit itself
                word[i, n] ^= np.uint8(1)
                errors[i] = 1
            continue
        errors[i] = -1
        L = _locator(S, t, order, exp, log, sigma, B, T)
        if L > t or sigma[L] == 0:
            continue
        terms, count = 0, 0
        for j in range(1, L + 1):
            if sigma[j]:
                powers[terms] = log[sigma[j]]
                steps[terms] = j
                terms += 1
        for p in range(n):                          # Chien: sigma(alpha^-p) = 0 says that the power p is wrong
            value = np.uint16(1)
            for k in range(terms):
                value ^= exp[powers[k]]
                powers[k] += (order if powers[k] < steps[k] else 0) - steps[k]
            if value == 0:
                found[count] = p
                count += 1
                if count == L:
                    break
        last = (L & 1) ^ parity if extended else 0  # the parity bit is wrong besides
        if count != L or L + last > t or (even and (L & 1) != parity):
            continue
        for k in range(L):
            word[i, n - 1 - found[k]] ^= np.uint8(1)
        if last:
            word[i, n] ^= np.uint8(1)
        errors[i] = L + last
