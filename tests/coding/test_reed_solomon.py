"""Reed-Solomon: published words, two reference libraries, errors and erasures up to and past the radius."""

import galois
import numpy as np
import pytest
import reedsolo
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal
from published import entries

from pcaptool.coding.reed_solomon import ReedSolomon
from pcaptool.coding.step import OK, SHORT, UNCORRECTABLE, Batch, LengthError, ParameterError

CODES = [
    {"n": 255, "k": 223, "poly": 0x187, "first_root": 112, "root_step": 11},
    {"n": 255, "k": 223, "poly": 0x187, "first_root": 112, "root_step": 11, "basis": "dual", "depth": 3},
    {"n": 255, "k": 239, "fill": 51},
    {"n": 15, "k": 9, "m": 4, "first_root": 1, "depth": 2},
    {"n": 7, "k": 3, "m": 3, "root_step": 3, "first_root": 5},
    {"n": 63, "k": 40, "m": 6, "first_root": 20, "root_step": 5},
    {"n": 100, "k": 80, "m": 10},
    {"n": 60, "k": 41, "m": 16, "first_root": 1},
]


def bits_of(symbols, m):
    symbols = np.asarray(symbols)
    return (symbols[..., None] >> np.arange(m - 1, -1, -1) & 1).astype(np.uint8).reshape(*symbols.shape[:-1], -1)


def symbols_of(bits, m):
    return bits.reshape(*bits.shape[:-1], -1, m).astype(np.int64) @ (1 << np.arange(m - 1, -1, -1))


def published_step(p):
    return ReedSolomon(m=p["m"], n=p["n"], k=p["k"], poly=int(p["field_poly"], 16), first_root=p["first_root"],
                       root_step=p["root_step"], basis=p.get("basis", "polynomial"))


def as_symbols(text, m):
    return np.frombuffer(bytes.fromhex(text), np.uint8).astype(np.int64)[None]


@pytest.mark.parametrize("entry", entries("rs_encode"))
def test_published_words_are_encoded(entry):
    step = published_step(entry["params"])
    data = as_symbols(entry["input_hex"], step.m)
    word = symbols_of(step.encode(bits_of(data, step.m)), step.m)
    assert bytes(word[0, step.k :].tolist()).hex() == entry["expected"], entry["source"]


@pytest.mark.parametrize("entry", entries("rs_decode"))
def test_published_words_are_decoded_or_given_up(entry):
    step, expected = published_step(entry["params"]), entry["expected"]
    received = as_symbols(entry["input_hex"], step.m)
    doubt = np.zeros(received.shape, np.uint8)
    doubt[0, entry["params"]["erasures"]] = 255
    out = step.decode(Batch(bits_of(received, step.m), doubt.repeat(step.m, axis=1)))
    assert (out.fault[0] == OK) == expected["ok"], entry["source"]
    if expected["ok"]:
        assert bytes(symbols_of(out.bits, step.m)[0].tolist()).hex() == expected["data_hex"]
        spent = 2 * expected["errors"] + expected["erasures"]
        assert out.headroom[0] == pytest.approx(1 - spent / (step.n - step.k))


def damaged(step, word, rng, errors, erasures):
    """Return (symbols, erased) with so many wrong and erased symbols in each codeword."""
    symbols = symbols_of(word, step.m)
    erased = np.zeros(symbols.shape, bool)
    n = symbols.shape[1] // step.depth
    for row in range(len(symbols)):
        for c in range(step.depth):
            at = rng.choice(n, errors + erasures, replace=False) * step.depth + c
            symbols[row, at[:errors]] ^= rng.integers(1, 1 << step.m, errors)
            symbols[row, at[errors:]] = rng.integers(0, 1 << step.m, erasures)
            erased[row, at[errors:]] = True
    return symbols, erased


@pytest.mark.parametrize("keys", CODES, ids=str)
def test_errors_and_erasures_up_to_the_radius_are_repaired(keys):
    step = ReedSolomon(**keys)
    rng = np.random.default_rng(step.n)
    data = rng.integers(0, 2, (12, (step.k - step.fill) * step.depth * step.m), np.uint8)
    word = step.encode(data)
    r = step.n - step.k
    for errors in {0, 1, r // 4, r // 2}:
        for erasures in {0, 1, r - 2 * errors}:
            if 2 * errors + erasures > r:
                continue
            symbols, erased = damaged(step, word, rng, errors, erasures)
            out = step.decode(Batch(bits_of(symbols, step.m), (erased * np.uint8(255)).repeat(step.m, axis=1)))
            assert_array_equal(out.bits, data)
            assert (out.fault == OK).all()
            assert_array_equal(out.repaired, (bits_of(symbols, step.m) != word).sum(axis=1))


@pytest.mark.parametrize("keys", CODES[:4], ids=str)
def test_words_past_the_radius_are_given_up_or_another_codeword(keys):
    step = ReedSolomon(**keys)
    rng = np.random.default_rng(9)
    data = rng.integers(0, 2, (40, (step.k - step.fill) * step.depth * step.m), np.uint8)
    symbols, _ = damaged(step, step.encode(data), rng, step.t + 1, 0)
    came = bits_of(symbols, step.m)
    out = step.decode(Batch(came))
    lost = out.fault == UNCORRECTABLE
    assert lost.any()
    if lost.all():
        return
    again = step.encode(out.bits[~lost])        # what is accepted is near a codeword, never something else
    near = (symbols_of(again, step.m) != symbols[~lost]).reshape(len(again), -1, step.depth).sum(axis=1)
    assert (near <= step.t).all()


def test_decoding_agrees_with_two_reference_libraries():
    """On random errors up to past the radius, galois and reedsolo find the same word or give up too."""

    step = ReedSolomon(n=40, k=28, first_root=1)
    other = galois.ReedSolomon(255, 243, field=galois.GF(2**8, irreducible_poly=0x11D, primitive_element=2), c=1)
    third = reedsolo.RSCodec(12, fcr=1, prim=0x11D)
    rng = np.random.default_rng(4)
    data = rng.integers(0, 256, (24, 28))
    word = symbols_of(step.encode(bits_of(data, 8)), 8)
    assert_array_equal(word, np.array([list(third.encode(bytes(d.tolist()))) for d in data]))
    assert_array_equal(word, np.asarray(other.encode(data.astype(np.uint8))))
    for errors in (3, 6, 7):
        came, _ = damaged(step, bits_of(word, 8), rng, errors, 0)
        out = step.decode(Batch(bits_of(came, 8)))
        got = symbols_of(out.bits, 8)
        for row in range(len(came)):
            try:
                expected = list(third.decode(bytes(came[row].tolist()))[0])
            except reedsolo.ReedSolomonError:
                expected = None
            assert (got[row].tolist() if out.fault[row] == OK else None) == expected
        theirs, count = other.decode(came.astype(np.uint8), errors=True)
        # the library knows nothing of symbols that are not sent: its success with more errors is ours only if it agrees
        for row in np.flatnonzero(out.fault == OK):
            assert count[row] >= 0 and got[row].tolist() == np.asarray(theirs[row]).tolist()


def test_random_words_are_accepted_as_often_as_counted():
    step = ReedSolomon(n=15, k=11, m=4)
    assert step.accepted_share() == pytest.approx((1 + 15 * 15 + 105 * 225) / 16**4)    # sphere volume by hand
    words = np.random.default_rng(8).integers(0, 2, (20000, 60), np.uint8)
    share = (step.decode(Batch(words)).fault == OK).mean()
    p = step.accepted_share()
    assert abs(share - p) < 4 * np.sqrt(p * (1 - p) / 20000)


@pytest.mark.parametrize("entry", [e for e in entries("fec_probability") if e.values[0]["params"]["model"]
                                   == "rs_random_word_decodable_fraction"])
def test_the_accepted_share_equals_the_published_one(entry):
    p = entry["params"]
    assert ReedSolomon(n=p["n"], k=p["k"]).accepted_share() == pytest.approx(entry["expected"], rel=1e-9)


@settings(max_examples=25, deadline=None)
@given(st.integers(1, 200), st.integers(0, 2**32))
def test_shorter_frames_are_shortened_codewords(data_symbols, seed):
    step = ReedSolomon(n=255, k=223, shorten=True)
    data = np.random.default_rng(seed).integers(0, 2, (3, data_symbols * 8), np.uint8)
    word = step.encode(data)
    full = ReedSolomon(n=255, k=223).encode(np.pad(data, ((0, 0), (223 * 8 - data.shape[1], 0))))
    assert_array_equal(word, full[:, -word.shape[1] :])
    word[:, : 8 * min(16, data_symbols)] ^= 1
    out = step.decode(Batch(word))
    assert_array_equal(out.bits, data)


def test_lengths_that_do_not_fit_are_short():
    step = ReedSolomon(n=15, k=11, m=4, depth=2)
    for n in (0, 1, 60, 119, 121, 240):
        assert (step.decode(Batch(np.ones((2, n), np.uint8))).fault == SHORT).all()
    with pytest.raises(LengthError, match="22 symbols of 4 bits in whole rounds of 2"):
        step.encode(np.zeros((1, 4), np.uint8))


@pytest.mark.parametrize(("keys", "key", "words"), [
    ({"n": 256, "k": 223}, "n", "at most 2\\*\\*8 - 1 = 255"),
    ({"n": 20, "k": 20}, "k", "less than n = 20"),
    ({"n": 255, "k": 223, "root_step": 51}, "root_step", "factor 51"),
    ({"n": 15, "k": 11, "m": 4, "basis": "dual"}, "basis", "m = 8"),
    ({"n": 255, "k": 223, "poly": 0x11B}, "poly", "not primitive"),
    ({"n": 255, "k": 223, "fill": 223}, "fill", "less than k = 223"),
])
def test_parameters_that_cannot_work_are_told(keys, key, words):
    with pytest.raises(ParameterError, match=words) as caught:
        ReedSolomon(**keys)
    assert caught.value.key == key
