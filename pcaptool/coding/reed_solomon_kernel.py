"""Reed-Solomon codewords: division by the generator, and decoding of errors and erasures.

Letters: n symbols of which k are data, r = n - k check symbols; S syndromes, Gamma the locator of the
erasures, Lambda that of errors and erasures, Omega the evaluator. A codeword is the polynomial whose
highest coefficient is sent first; its roots are beta^first .. beta^(first + r - 1), beta = alpha^step.
"""

import numpy as np
from numba import njit
from numpy.typing import NDArray


@njit(cache=True, nogil=True)
def pack(bits: NDArray[np.uint8], m: int) -> NDArray[np.uint16]:
    """Return rows of bits as m-bit symbols, most significant bit first: uint16 (frame, symbol)."""
    out = np.empty((bits.shape[0], bits.shape[1] // m), np.uint16)
    for i in range(out.shape[0]):
        for s in range(out.shape[1]):
            value = np.uint16(0)
            for j in range(s * m, s * m + m):
                value = np.uint16(value << np.uint16(1) | np.uint16(bits[i, j]))
            out[i, s] = value
    return out


@njit(cache=True, nogil=True)
def unpack(symbols: NDArray[np.uint16], m: int) -> NDArray[np.uint8]:
    """Return symbols as bits, most significant bit first: uint8 (frame, symbol * m)."""
    out = np.empty((symbols.shape[0], symbols.shape[1] * m), np.uint8)
    for i in range(symbols.shape[0]):
        for s in range(symbols.shape[1]):
            value = symbols[i, s]
            for j in range(m):
                out[i, s * m + j] = np.uint8(value >> np.uint16(m - 1 - j) & np.uint16(1))
    return out


@njit(cache=True, nogil=True)
def divide(row: NDArray[np.uint16], first: int, step: int, count: int, g_log: NDArray[np.int32],
           rows: NDArray[np.uint16], exp: NDArray[np.uint16], log: NDArray[np.int32], rest: NDArray[np.uint16]) -> None:
    """Divide the data polynomial, times x^r, by the generator: ``rest`` uint16 (r,), highest term first.

    The data are ``count`` symbols of ``row`` from ``first`` on, ``step`` apart.
    g_log  logarithms of the generator behind its leading 1, highest first; -1 for 0
    rows   uint16 (2^m, r)  the generator times every symbol, or no rows where that is too large
    """
    r = len(rest)
    for j in range(r):
        rest[j] = 0
    for i in range(count):
        feedback = row[first + i * step] ^ rest[0]
        if len(rows):
            times = rows[feedback]
            for j in range(r - 1):
                rest[j] = rest[j + 1] ^ times[j]
            rest[r - 1] = times[r - 1]
        elif feedback == 0:
            for j in range(r - 1):
                rest[j] = rest[j + 1]
            rest[r - 1] = 0
        else:
            by = log[feedback]
            for j in range(r - 1):
                rest[j] = rest[j + 1] ^ (exp[by + g_log[j]] if g_log[j] >= 0 else np.uint16(0))
            rest[r - 1] = exp[by + g_log[r - 1]] if g_log[r - 1] >= 0 else np.uint16(0)


@njit(cache=True, nogil=True)
def check_symbols(data: NDArray[np.uint16], depth: int, g_log: NDArray[np.int32], rows: NDArray[np.uint16],
                  exp: NDArray[np.uint16], log: NDArray[np.int32]) -> NDArray[np.uint16]:
    """Return the check symbols of ``depth`` interleaved codewords: uint16 (frame, r * depth)."""
    r, k = len(g_log), data.shape[1] // depth
    out = np.empty((data.shape[0], r * depth), np.uint16)
    rest = np.empty(r, np.uint16)
    for i in range(data.shape[0]):
        for c in range(depth):
            divide(data[i], c, depth, k, g_log, rows, exp, log, rest)
            for j in range(r):
                out[i, j * depth + c] = rest[j]
    return out


@njit(cache=True, nogil=True)
def _syndromes(rest: NDArray[np.uint16], first: int, step: int, order: int, exp: NDArray[np.uint16],
               log: NDArray[np.int32], S: NDArray[np.uint16]) -> None:
    """Evaluate the remainder (highest term first) at the roots: S_j = rest(beta^(first + j))."""
    r = len(rest)
    for j in range(r):
        root = (first + j) * step % order
        value, power = np.uint16(0), 0
        for i in range(r - 1, -1, -1):
            if rest[i]:
                value ^= exp[log[rest[i]] + power]
            power += root
            power -= order if power >= order else 0
        S[j] = value


@njit(cache=True, nogil=True)
def _berlekamp_massey(S: NDArray[np.uint16], erasures: NDArray[np.int64], e: int, order: int,
                      exp: NDArray[np.uint16], log: NDArray[np.int32], Lambda: NDArray[np.uint16],
                      B: NDArray[np.uint16], T: NDArray[np.uint16]) -> int:
    """Find Lambda, lowest term first, and return the length L of the shift register.

    erasures  logarithms of the locators of the first ``e`` of them; Lambda begins with
    Gamma(x) = product of (1 - X_i x). Source: Massey (1969), IEEE Trans. Inf. Theory 15:122-127; begun
    behind the erasures as in Blahut, Algebraic Codes for Data Transmission (2003), section 7.5.
    """
    r = len(S)
    Lambda[:] = 0
    Lambda[0] = 1
    for i in range(e):
        for j in range(i + 1, 0, -1):
            if Lambda[j - 1]:
                Lambda[j] ^= exp[log[Lambda[j - 1]] + erasures[i]]
    B[:] = Lambda
    L, before, by, shift = e, e, 0, 1               # B has degree ``before`` at most; by: log of its discrepancy
    for step in range(e, r):
        delta = np.uint16(0)
        for j in range(min(L, step) + 1):
            if Lambda[j] and S[step - j]:
                delta ^= exp[log[Lambda[j]] + log[S[step - j]]]
        if delta == 0:
            shift += 1
            continue
        grows = 2 * L <= step + e
        if grows:
            for j in range(L + 1):
                T[j] = Lambda[j]
        factor = log[delta] - by + (order if log[delta] < by else 0)
        for j in range(min(before, r - shift) + 1):     # Lambda -= delta / b x^shift B
            if B[j]:
                Lambda[j + shift] ^= exp[factor + log[B[j]]]
        if grows:
            for j in range(L + 1):
                B[j] = T[j]
            before, by, shift = L, log[delta], 1
            L = step + 1 + e - L
        else:
            shift += 1
    return L


@njit(cache=True, nogil=True)
def _search(Lambda: NDArray[np.uint16], L: int, n: int, step: int, order: int, exp: NDArray[np.uint16],
            log: NDArray[np.int32], powers: NDArray[np.int64], found: NDArray[np.int64]) -> int:
    """Find the powers i < n with Lambda(beta^-i) = 0 and return how many: Chien's search.

    Every term's logarithm goes down by its degree times ``step`` from power to power.
    """
    terms = 0
    for j in range(1, L + 1):
        if Lambda[j]:
            powers[2 * terms] = log[Lambda[j]]
            powers[2 * terms + 1] = j * step % order
            terms += 1
    count = 0
    for i in range(n):
        value = np.uint16(1)
        for t in range(terms):
            at = powers[2 * t]
            value ^= exp[at]
            at -= powers[2 * t + 1]
            powers[2 * t] = at + order if at < 0 else at
        if value == 0:
            found[count] = i
            count += 1
            if count == L:
                break
    return count


@njit(cache=True, nogil=True)
def _forney(S: NDArray[np.uint16], Lambda: NDArray[np.uint16], L: int, first: int, step: int, order: int,
            exp: NDArray[np.uint16], log: NDArray[np.int32], found: NDArray[np.int64], Omega: NDArray[np.uint16],
            values: NDArray[np.uint16]) -> None:
    """Give the value of every error: X^(1 - first) Omega(1 / X) / Lambda'(1 / X), Forney's formula.

    Lambda has L different roots, so its derivative is not 0 there. An erased symbol that came right has 0.
    """
    for i in range(L):                              # Omega = S Lambda mod x^r: its degree is below L
        value = np.uint16(0)
        for j in range(i + 1):
            if Lambda[j] and S[i - j]:
                value ^= exp[log[Lambda[j]] + log[S[i - j]]]
        Omega[i] = value
    for f in range(L):
        X = found[f] * step % order
        inverse = (order - X) % order
        above, below = np.uint16(0), np.uint16(0)
        power = 0
        for i in range(L + 1):
            if i < L and Omega[i]:
                above ^= exp[log[Omega[i]] + power]
            if i % 2 == 0 and i + 1 <= L and Lambda[i + 1]:     # i Lambda_i x^(i-1): odd terms remain
                below ^= exp[log[Lambda[i + 1]] + power]
            power = (power + inverse) % order
        values[f] = exp[(log[above] - log[below] + X * (1 - first)) % order] if above else np.uint16(0)


@njit(cache=True, nogil=True)
def correct(
    word: NDArray[np.uint16], erased: NDArray[np.bool_], depth: int, first: int, step: int, order: int,
    g_log: NDArray[np.int32], rows: NDArray[np.uint16], exp: NDArray[np.uint16], log: NDArray[np.int32],
    spent: NDArray[np.int32], given_up: NDArray[np.bool_],
) -> None:
    """Correct interleaved codewords in place.

    word      uint16 (frame, symbol)  ``depth`` codewords, symbol j belongs to codeword j mod depth
    erased    bool, the same shape, or no rows
    spent     int32 (frame,)  raised to the most 2 errors + erasures of a codeword
    given_up  bool (frame,)   set where a codeword could not be repaired; that codeword is left as it came
    Erased symbols are tried as erasures first; where that fails, as symbols like all others.
    """
    r, n = len(g_log), word.shape[1] // depth
    rest, S = np.empty(r, np.uint16), np.empty(r, np.uint16)
    Lambda, B, T = np.empty(r + 1, np.uint16), np.empty(r + 1, np.uint16), np.empty(r + 1, np.uint16)
    Omega, values = np.empty(r + 1, np.uint16), np.empty(r + 1, np.uint16)
    powers, found, erasures = np.empty(2 * r + 2, np.int64), np.empty(r + 1, np.int64), np.empty(r + 1, np.int64)
    for i in range(word.shape[0]):
        for c in range(depth):
            divide(word[i], c, depth, n - r, g_log, rows, exp, log, rest)
            wrong = False
            for j in range(r):
                rest[j] ^= word[i, (n - r + j) * depth + c]
                wrong = wrong or rest[j] != 0
            e = 0
            if len(erased):
                for s in range(n):
                    if erased[i, s * depth + c]:
                        if e <= r:
                            erasures[min(e, r)] = (n - 1 - s) * step % order
                        e += 1
            if not wrong:
                spent[i] = max(spent[i], min(e, r))
                continue
            _syndromes(rest, first, step, order, exp, log, S)
            repaired = False
            for attempt in range(2):
                taken = e if attempt == 0 else 0
                if taken > r or (attempt == 1 and e == 0):
                    continue
                L = _berlekamp_massey(S, erasures, taken, order, exp, log, Lambda, B, T)
                if 2 * L - taken > r or L > r or Lambda[L] == 0:
                    continue
                if _search(Lambda, L, n, step, order, exp, log, powers, found) != L:
                    continue
                _forney(S, Lambda, L, first, step, order, exp, log, found, Omega, values)
                for f in range(L):
                    word[i, (n - 1 - found[f]) * depth + c] ^= values[f]
                spent[i] = max(spent[i], 2 * L - taken)
                repaired = True
                break
            if not repaired:
                given_up[i] = True
