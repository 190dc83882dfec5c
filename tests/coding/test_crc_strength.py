"""Strength of CRC generators: published factors, orders and minimum distances, and exhaustive search."""

from itertools import combinations

import galois
import numpy as np
import pytest
from published import entries

from pcaptool.coding.crc_strength import crc_strength, factors, least_distance, missed_patterns, order
from pcaptool.coding.cyclic import product, remainder


@pytest.mark.parametrize("entry", entries("crc_max_data_bits"))
def test_the_distance_at_a_length_is_the_published_one(entry):
    """Koopman (2002), Koopman and Chakravarty (2004): longest data word at which a distance holds."""
    p, bits = entry["params"], entry["expected"]
    poly = int(p["poly"], 16) | 1 << p["width"]
    d, exact = least_distance(poly, bits + p["width"], 10)
    assert d >= p["hd"] or not exact, entry["source"]
    longer, exact = least_distance(poly, bits + 1 + p["width"], 10)
    assert exact and longer < p["hd"], entry["source"]


@pytest.mark.parametrize("poly", [0x107, 0x11021, 0x18005, 0x13D65, 0x104C11DB7, 0x11EDC6F41, 0x1864CFB, 0x15D6DCB,
                                  0b101010101, 0x1000000000000001B, 0x142F0E1EBA9EA3693, 0b110110, 0x10810 << 3])
def test_factors_are_those_of_a_reference_library(poly):
    theirs, times = galois.Poly.Int(poly).factors()
    assert dict(factors(poly)) == {int(f): t for f, t in zip(theirs, times, strict=True)}
    again = 1
    for factor, count in factors(poly):
        for _ in range(count):
            again = product(again, factor)
    assert again == poly


ORDERS = [
    (0x13, 15, "primitive of degree 4"),
    (0b11111, 5, "x^4 + x^3 + x^2 + x + 1 divides x^5 + 1"),
    (0x11021, 32767, "ITU-T V.41: (x + 1) times a primitive polynomial of degree 15; Peterson and Brown 1961"),
    (0x104C11DB7, 2**32 - 1, "IEEE 802.3: primitive; Koopman 2002"),
    (0x11EDC6F41, 2**31 - 1, "Castagnoli et al. 1993: (x + 1) times a primitive polynomial of degree 31"),
    (0x13D65, 151, "distance 6 up to 135 data bits and 2 from 136 on, 135 + 16 = 151: public tables of P. Koopman"),
    (0b101, 2, "(x + 1)^2 divides x^2 + 1"),
]


@pytest.mark.parametrize(("poly", "expected", "why"), ORDERS)
def test_orders(poly, expected, why):
    assert order(poly) == expected, why
    assert remainder(1 << expected | 1, poly) == 0 if expected < 2**16 else True


@pytest.mark.parametrize("entry", entries("crc_undetected_count"))
def test_the_patterns_that_are_missed_are_as_many_as_published(entry):
    p = entry["params"]
    poly = int(p["poly"], 16) | 1 << p["width"]
    assert missed_patterns(poly, p["data_bits"] + p["width"], p["weight"]) == entry["expected"], entry["source"]


@pytest.mark.parametrize("poly", [0b1011, 0b10011, 0x107, 0x12F, 0b110111, 0x131])
@pytest.mark.parametrize("bits", [12, 17, 20])
def test_the_least_distance_equals_an_exhaustive_search(poly, bits):
    syndromes = [remainder(1 << i, poly) for i in range(bits)]
    least = next(w for w in range(1, bits + 1) for pattern in combinations(syndromes, w)
                 if np.bitwise_xor.reduce(pattern) == 0)
    assert least_distance(poly, bits, 20) == (least, True)


def test_a_generator_without_its_constant_term_is_weaker_than_its_width():
    """A register that shifts right, XORed with the constant 0x1021 as it is printed, divides by another polynomial.

    Its generator is the constant read from the other end, and lacks the constant term: 0x1021 has bit 0 set, which
    is then the term next to the highest, and bit 15 clear, which is the constant. One check bit never changes.
    """
    reversed_constant = int(f"{0x1021:016b}"[::-1], 2)
    strength = crc_strength(1 << 16 | reversed_constant, 72)
    assert strength.width == 16 and strength.effective < 16
    register_bits = set()
    for value in range(256):                        # the register itself, by hand
        register = value
        for _ in range(8):
            register = register >> 1 ^ (0x1021 if register & 1 else 0)
        register_bits.add(register >> 15 & 1)
    assert register_bits == {0}
    good = crc_strength(0x11021, 72)
    assert good.effective == 16 and good.odd and good.burst == 16 and (good.distance, good.exact) == (4, True)
