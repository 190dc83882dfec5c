"""Polynomials over GF(2) as numbers, bit i for x^i, and the systematic generator matrix of a cyclic code."""

import numpy as np
from numpy.typing import NDArray


def remainder(value: int, poly: int) -> int:
    """Return value mod poly; polynomials over GF(2) as numbers, bit i for x^i."""
    size = poly.bit_length()
    while value.bit_length() >= size:
        value ^= poly << (value.bit_length() - size)
    return value


def product(a: int, b: int) -> int:
    """Return the product of two polynomials over GF(2)."""
    out = 0
    while b:
        if b & 1:
            out ^= a
        a, b = a << 1, b >> 1
    return out


def quotient(a: int, b: int) -> int:
    """Return a divided by b, without the remainder."""
    out = 0
    while a.bit_length() >= b.bit_length():
        shift = a.bit_length() - b.bit_length()
        out |= 1 << shift
        a ^= b << shift
    return out


def greatest_common_divisor(a: int, b: int) -> int:
    while b:
        a, b = b, remainder(a, b)
    return a


def cyclic_generator(poly: int, n: int, k: int) -> NDArray[np.uint8]:
    """Return the systematic generator matrix (k, n) of a cyclic code, shortened where n is less than its length.

    Data first; behind them the remainder of x^(n-k) times the data by the generator polynomial.
    """
    r = n - k
    out = np.zeros((k, n), np.uint8)
    for i in range(k):
        out[i, i] = 1
        check = remainder(1 << (n - 1 - i), poly)
        out[i, k:] = [check >> (r - 1 - j) & 1 for j in range(r)]
    return out
