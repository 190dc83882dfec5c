"""GF(2^m): primitive polynomials, published generators of Golay, BCH and Reed-Solomon codes, the dual basis."""

import galois
import numpy as np
import pytest
from published import entries

from pcaptool.coding.bch import Bch, bch_generator, minimal_polynomial
from pcaptool.coding.cyclic import product, remainder
from pcaptool.coding.field import PRIMITIVE, field, polynomial_text
from pcaptool.coding.reed_solomon import ReedSolomon
from pcaptool.coding.step import ParameterError


@pytest.mark.parametrize("m", PRIMITIVE)
def test_a_field_has_all_its_powers(m):
    f = field(m)
    assert sorted(f.exp[: f.order].tolist()) == list(range(1, 1 << m))
    assert f.power(f.order) == 1 and f.power(-1) == f.exp[f.order - 1]


def test_multiplication_equals_that_of_a_reference_library():

    f, other = field(8, 0x187), galois.GF(2**8, irreducible_poly=0x187, primitive_element=2)
    a, b = np.random.default_rng(3).integers(0, 256, (2, 300))
    assert [f.multiply(int(x), int(y)) for x, y in zip(a, b, strict=True)] == (other(a) * other(b)).tolist()


def test_a_polynomial_that_is_not_primitive_is_told_with_the_power_that_comes_back():
    """x^4 + x^3 + x^2 + x + 1 divides x^5 + 1: alpha^5 = 1, by hand."""
    with pytest.raises(ParameterError) as caught:
        field(4, 0b11111)
    assert caught.value.key == "poly" and "alpha^5 = alpha^0" in caught.value.found
    with pytest.raises(ParameterError, match="degree 8"):
        field(7, 0x11D)


@pytest.mark.parametrize("entry", entries("bch_generator"))
def test_bch_generators_equal_the_handbook_table(entry):
    p, expected = entry["params"], entry["expected"]
    m, poly = p["n"].bit_length(), int(p["prim_poly"], 16)
    assert bch_generator(m, poly, p["t"]) == int(expected["hex"], 16) == int(expected["octal"], 8), entry["source"]
    step = Bch(n=p["n"], k=p["k"], poly=poly)
    assert step.errors == p["t"]


@pytest.mark.parametrize("entry", entries("rs_generator"))
def test_reed_solomon_generators_equal_the_published_ones(entry):
    p = entry["params"]
    n = (1 << p["m"]) - 1
    step = ReedSolomon(m=p["m"], n=n, k=n - p["nroots"], poly=int(p["field_poly"], 16), first_root=p["first_root"],
                       root_step=p["root_step"])
    assert step._own.generator.tolist() == entry["expected"]["coefficients"], entry["source"]
    assert [0, *step._own.g_log.tolist()] == entry["expected"]["logs"], entry["source"]


@pytest.mark.parametrize("entry", entries("ccsds_dual_basis"))
def test_the_dual_basis_is_that_of_the_standard(entry):
    own = ReedSolomon(n=255, k=223, poly=0x187, first_root=112, root_step=11, basis="dual")._own
    expected = entry["expected"]
    assert bytes(own.sent[:16].astype(np.uint8)).hex() == expected["first16"], entry["source"]
    assert bytes(own.sent[1 << np.arange(8)].astype(np.uint8)).hex() == expected["unit_images"]
    assert bytes(own.element[:16].astype(np.uint8)).hex() == expected["inverse_first16"]


def test_polynomials_by_hand():
    assert product(0b11, 0b111) == 0b1001               # (x + 1)(x^2 + x + 1) = x^3 + 1
    assert remainder(0b1001, 0b11) == 0 and remainder(0b1000, 0b1011) == 0b011
    assert polynomial_text(0x13) == "x^4 + x + 1"
    assert minimal_polynomial(field(4), 3) == 0b11111   # of alpha^3 in GF(16): Lin and Costello, table 2.9
    assert minimal_polynomial(field(4), 5) == 0b111     # of alpha^5, the same table
