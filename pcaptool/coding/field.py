"""The finite fields GF(2^m): tables of powers and logarithms."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.step import ParameterError

# A primitive polynomial for every m, those with the fewest terms and the lowest; Lin and Costello, Error
# Control Coding, 2nd edition, table 2.7 (3 to 14), 15 and 16 from memory; a test shows all to be primitive.
PRIMITIVE = {3: 0xB, 4: 0x13, 5: 0x25, 6: 0x43, 7: 0x89, 8: 0x11D, 9: 0x211, 10: 0x409, 11: 0x805, 12: 0x1053,
             13: 0x201B, 14: 0x4443, 15: 0x8003, 16: 0x1100B}


@dataclass(frozen=True, slots=True, eq=False)
class Field:
    """GF(2^m) by a primitive polynomial; alpha is its root, elements are numbers, bit i for alpha^i.

    order  2^m - 1, the number of elements but 0
    exp    uint16 (2 * order,)  exp[i] = alpha^i; twice round, so that sums of two logarithms need no modulo
    log    int32 (2^m,)         log[alpha^i] = i; log[0] = -1
    """

    m: int
    poly: int
    order: int
    exp: NDArray[np.uint16]
    log: NDArray[np.int32]

    def multiply(self, a: int, b: int) -> int:
        return int(self.exp[int(self.log[a]) + int(self.log[b])]) if a and b else 0

    def power(self, i: int) -> int:
        """Return alpha^i for any i."""
        return int(self.exp[i % self.order])


def polynomial_text(poly: int) -> str:
    """Return a polynomial over GF(2) as text, highest term first."""
    terms = [i for i in range(poly.bit_length() - 1, -1, -1) if poly >> i & 1]
    return " + ".join("1" if i == 0 else "x" if i == 1 else f"x^{i}" for i in terms) or "0"


@lru_cache(maxsize=32)
def field(m: int, poly: int = 0) -> Field:
    """Return GF(2^m); poly 0 takes the usual primitive polynomial. Raises ParameterError, key poly."""
    poly = poly or PRIMITIVE[m]
    if poly.bit_length() - 1 != m:
        raise ParameterError(
            "poly", found=f"0x{poly:X} = {polynomial_text(poly)}, degree {poly.bit_length() - 1}",
            expected=f"degree m = {m}, the highest term written out",
            fix=f"set m = {poly.bit_length() - 1}, or a polynomial such as 0x{PRIMITIVE[m]:X}")
    order = (1 << m) - 1
    exp, log = np.zeros(2 * order, np.uint16), np.full(1 << m, -1, np.int32)
    x = 1
    for i in range(order):
        if log[x] >= 0 or x == 0:
            raise ParameterError(
                "poly", found=f"0x{poly:X} = {polynomial_text(poly)}: alpha^{i} = "
                              f"{'0' if x == 0 else f'alpha^{log[x]}'}, so it is not primitive",
                expected=f"a primitive polynomial: alpha^i takes all {order} values before it comes back to 1",
                fix=f"take for example 0x{PRIMITIVE[m]:X} = {polynomial_text(PRIMITIVE[m])}")
        exp[i], log[x] = x, i
        x = x << 1 ^ (poly if x >> (m - 1) & 1 else 0)
    exp[order:] = exp[:order]
    return Field(m, poly, order, exp, log)
