"""What a CRC can find: factors and order of its generator, bursts, and its least distance at a length.

Polynomials over GF(2) are numbers, bit i for x^i.
"""

from dataclasses import dataclass
from functools import lru_cache
from math import comb, gcd

import numpy as np
from numba import njit
from numpy.typing import NDArray

from pcaptool.coding.cyclic import greatest_common_divisor, product, quotient, remainder

WORK = 200_000_000      # look-ups after which the search for a light pattern ends
LARGEST_TABLE = 1 << 25
EMPTY = np.uint64(2**64 - 1)
MIX = np.uint64(0x9E3779B97F4A7C15)     # 2**64 / golden ratio, Knuth, TAOCP vol. 3, 6.4


def _derivative(a: int) -> int:
    return sum(1 << (i - 1) for i in range(1, a.bit_length(), 2) if a >> i & 1)


def _split(a: int, degree: int) -> list[int]:
    """Return the factors of a product of different irreducible polynomials of one degree, by traces.

    Source: Cantor and Zassenhaus (1981), Math. Comp. 36:587-592, for characteristic 2.
    """
    if a.bit_length() - 1 == degree:
        return [a]
    trial = 2
    while True:
        trace, power = 0, remainder(trial, a)
        for _ in range(degree):
            trace ^= power
            power = remainder(product(power, power), a)
        part = greatest_common_divisor(a, trace)
        if 1 < part.bit_length() < a.bit_length():
            return _split(part, degree) + _split(quotient(a, part), degree)
        trial += 1


@lru_cache(maxsize=256)
def factors(poly: int) -> tuple[tuple[int, int], ...]:
    """Return (irreducible factor, how often) of a polynomial, ascending.

    Square-free parts, then parts of one degree by x^(2^d) + x. Source: Knuth, TAOCP vol. 2, 4.6.2.
    """
    if poly.bit_length() < 2:
        return ()
    found: set[int] = set()

    def add(a: int) -> None:
        derivative = _derivative(a)
        if derivative == 0:                         # a square
            root = sum(1 << (i // 2) for i in range(0, a.bit_length(), 2) if a >> i & 1)
            if root.bit_length() > 1:
                add(root)
            return
        repeated = greatest_common_divisor(a, derivative)
        single = quotient(a, repeated)
        if repeated.bit_length() > 1:
            add(repeated)
        degree, power = 0, 2
        while single.bit_length() > 1:
            degree, power = degree + 1, remainder(product(power, power), single)
            part = greatest_common_divisor(single, power ^ remainder(2, single))
            if part.bit_length() > 1:
                found.update(_split(part, degree))
                single = quotient(single, part)
                power = remainder(power, single) if single.bit_length() > 1 else power

    rest = poly
    while rest & 1 == 0:
        rest >>= 1
        found.add(2)
    if rest.bit_length() > 1:
        add(rest)
    exact = {}
    for factor in found:
        times, left = 0, poly
        while left.bit_length() >= factor.bit_length() and remainder(left, factor) == 0:
            left, times = quotient(left, factor), times + 1
        exact[factor] = times
    return tuple(sorted(exact.items()))


def _primes(n: int) -> set[int]:
    """Return the prime factors of a number below 2^64: trial division, then Pollard's rho."""
    out: set[int] = set()
    for p in (2, 3, 5, 7, 11, 13, 17, 19, 23, 29, 31, 37):
        while n % p == 0:
            out.add(p)
            n //= p
    todo = [n] if n > 1 else []
    while todo:
        m = todo.pop()
        if all(pow(a, m - 1, m) == 1 and _strong(a, m) for a in (2, 3, 5, 7, 11, 13, 17, 19, 23, 29, 31, 37)):
            out.add(m)
            continue
        c = 1
        while True:
            x = y = 2
            d = 1
            while d == 1:
                x = (x * x + c) % m
                y = (y * y + c) % m
                y = (y * y + c) % m
                d = gcd(abs(x - y), m)
            if d != m:
                todo += [d, m // d]
                break
            c += 1
    return out


def _strong(a: int, m: int) -> bool:
    """Return whether m passes the Miller-Rabin test to a base."""
    odd, twos = m - 1, 0
    while odd % 2 == 0:
        odd, twos = odd // 2, twos + 1
    x = pow(a, odd, m)
    return x in (1, m - 1) or any((x := x * x % m) == m - 1 for _ in range(twos - 1))


def _x_to(power: int, modulus: int) -> int:
    """Return x^power mod modulus."""
    out, base = 1, remainder(2, modulus)
    while power:
        if power & 1:
            out = remainder(product(out, base), modulus)
        base = remainder(product(base, base), modulus)
        power >>= 1
    return out


@lru_cache(maxsize=256)
def order(poly: int) -> int:
    """Return the least e with poly dividing x^e + 1; factors x of the polynomial are left aside.

    Two wrong bits less than so far apart are always found. Source: Lidl and Niederreiter, Finite Fields,
    theorem 3.9.
    """
    out, most = 1, 1
    for factor, times in factors(poly):
        if factor == 2:
            continue
        m = factor.bit_length() - 1
        e = (1 << m) - 1
        for p in _primes(e):
            while e % p == 0 and _x_to(e // p, factor) == 1:
                e //= p
        out = out * e // gcd(out, e)
        most = max(most, times)
    while most > 1:
        out, most = 2 * out, (most + 1) // 2
    return out


@njit(cache=True, nogil=True)
def _put(table: NDArray[np.uint64], value: np.uint64) -> None:
    mask = np.uint64(len(table) - 1)
    at = (value * MIX) >> np.uint64(20) & mask
    while table[at] != EMPTY and table[at] != value:
        at = (at + np.uint64(1)) & mask
    table[at] = value


@njit(cache=True, nogil=True)
def _has(table: NDArray[np.uint64], value: np.uint64) -> bool:
    mask = np.uint64(len(table) - 1)
    at = (value * MIX) >> np.uint64(20) & mask
    while table[at] != EMPTY:
        if table[at] == value:
            return True
        at = (at + np.uint64(1)) & mask
    return False


@njit(cache=True, nogil=True)
def _sums(s: NDArray[np.uint64], size: int, start: int, table: NDArray[np.uint64], look: bool) -> bool:
    """Put start plus every sum of ``size`` different syndromes into the table, or look whether one is there."""
    n = len(s)
    if size > n:
        return False
    at = np.arange(size)
    while True:
        value = np.uint64(start)
        for j in range(size):
            value ^= s[at[j]]
        if not look:
            _put(table, value)
        elif _has(table, value):
            return True
        j = size - 1
        while j >= 0 and at[j] == n - size + j:
            j -= 1
        if j < 0:
            return False
        at[j] += 1
        for k in range(j + 1, size):
            at[k] = at[k - 1] + 1


@lru_cache(maxsize=256)
def least_distance(poly: int, bits: int, most: int = 8) -> tuple[int, bool]:
    """Return (d, exact): the least number of wrong bits in ``bits`` that a CRC can miss, or at least d.

    poly  the generator, its highest term included; bits of data and check together
    A pattern is missed when the syndromes x^i mod poly of its bits add up to 0. Shifted to the low end, its
    first syndrome is 1: the others are split in halves, sums of one half are kept in a table and those of
    the other looked up. Source: Koopman (2002) and Koopman and Chakravarty (2004), DSN.
    """
    width = poly.bit_length() - 1
    if bits <= width:
        return most, False
    if poly & 1 == 0:                               # a wrong bit of the check that no data bit can reach
        return least_distance(poly >> 1, bits - 1, most) if poly > 2 else (1, True)
    if bits > order(poly):
        return 2, True
    syndromes = np.empty(bits - 1, np.uint64)
    x = 1
    for i in range(bits - 1):
        x = remainder(x << 1, poly)
        syndromes[i] = x
    n, work = len(syndromes), 0
    even = poly.bit_count() % 2 == 0
    for d in range(3, most + 1):
        if d == poly.bit_count():                   # the generator itself is such a pattern
            return d, True
        if even and d % 2:
            continue                                # x + 1 divides: an odd number of wrong bits is always found
        low = (d - 1) // 2                          # syndromes besides the first: low in the table, the rest looked up
        high = d - 1 - low
        entries, looks = comb(n, low), comb(n, high)
        work += entries + looks
        if work > WORK or 2 * entries > LARGEST_TABLE:
            return d, False
        table = np.full(max(1 << (2 * entries).bit_length(), 16), EMPTY, np.uint64)
        _sums(syndromes, low, 0, table, False)
        if _sums(syndromes, high, 1, table, True):
            return d, True
    return most + 1, False


@njit(cache=True, nogil=True)
def _count(s: NDArray[np.uint64], weight: int) -> int:
    """Count patterns of 2 to 4 bits that add up to 0; s: syndromes x^0, x^1 ... of all bits.

    One whose bits reach from 0 to k can be shifted to len(s) - k places.
    """
    n, count = len(s), 0
    size = 16
    while size < 4 * n:
        size *= 2
    mask = np.uint64(size - 1)
    value_at, index_at = np.full(size, EMPTY, np.uint64), np.zeros(size, np.int64)
    for i in range(n):
        at = (s[i] * MIX) >> np.uint64(20) & mask
        while value_at[at] != EMPTY:
            at = (at + np.uint64(1)) & mask
        value_at[at], index_at[at] = s[i], i
    for k in range(1, n):
        places = n - k
        if weight == 2:
            count += places if s[k] == s[0] else 0
            continue
        for j in range(1, k if weight == 4 else 2):
            wanted = s[0] ^ s[k] ^ (s[j] if weight == 4 else np.uint64(0))
            at = (wanted * MIX) >> np.uint64(20) & mask
            while value_at[at] != EMPTY:
                if value_at[at] == wanted and 0 < index_at[at] < (j if weight == 4 else k):
                    count += places
                at = (at + np.uint64(1)) & mask
    return count


def missed_patterns(poly: int, bits: int, weight: int) -> int:
    """Return how many patterns of 2, 3 or 4 wrong bits in ``bits`` a CRC misses, of a generator with a +1 term."""
    syndromes, x = np.empty(bits, np.uint64), 1
    for i in range(bits):
        syndromes[i] = x
        x = remainder(x << 1, poly)
    return int(_count(syndromes, weight))


@dataclass(frozen=True, slots=True)
class CrcStrength:
    """What a generator polynomial can do.

    width         degree, as written
    effective     degree without factors x: check bits that depend on all data
    factors       (irreducible factor, how often)
    order         two wrong bits less than so far apart are always found
    burst         every burst of so many bits is found
    odd           every odd number of wrong bits is found
    distance, exact  fewest wrong bits that can be missed at ``bits``, or at least so many
    """

    width: int
    effective: int
    factors: tuple[tuple[int, int], ...]
    order: int
    burst: int
    odd: bool
    bits: int
    distance: int
    exact: bool


def crc_strength(poly: int, bits: int) -> CrcStrength:
    """Return the strength of a generator, highest term included, for words of data and check bits together."""
    split = factors(poly)
    width = poly.bit_length() - 1
    effective = width - sum(times for factor, times in split if factor == 2)
    distance, exact = least_distance(poly, bits)
    return CrcStrength(width, effective, split, order(poly), effective, any(f == 3 for f, _ in split), bits, distance,
                       exact)
