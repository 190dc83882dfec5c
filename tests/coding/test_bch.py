"""BCH and Golay codes: published words, weights, every error pattern up to the radius."""

from itertools import combinations

import galois
import numpy as np
import pytest
from numpy.testing import assert_array_equal
from published import bits, entries

from pcaptool.coding.bch import Bch
from pcaptool.coding.golay import Golay
from pcaptool.coding.linear import code_weights, generator_of
from pcaptool.coding.step import OK, UNCORRECTABLE, Batch, ParameterError


def step_of(code):
    g = int(code["g"], 16)
    extended = code["extend"] == "even"
    if g == 0xC75:
        return Golay(n=code["n"])
    m = (code["n"] - extended).bit_length()
    return Bch(n=code["n"], k=code["k"], m=m, generator=g, extended=extended,
               complement=code.get("complement_parity", False))


def cyclic_bch(entry):
    """The published cyclic codes that are BCH or Golay codes of full length."""
    code = entry.values[0]["params"]["code"]
    return code["type"] == "cyclic" and code["g"] in ("0x769", "0xc5", "0x537", "0xc75")


@pytest.mark.parametrize("entry", [e for e in entries("block_encode") if cyclic_bch(e)])
def test_published_words_are_encoded(entry):
    step = step_of(entry["params"]["code"])
    assert_array_equal(step.encode(bits(entry["params"]["input_bits"])), bits(entry["expected"]), entry["source"])


@pytest.mark.parametrize("entry", [e for e in entries("block_decode") if cyclic_bch(e)])
def test_published_words_are_decoded_or_given_up(entry):
    out = step_of(entry["params"]["code"]).decode(Batch(bits(entry["params"]["input_bits"])))
    expected = entry["expected"]
    assert (out.fault[0] == OK) == expected["ok"], entry["source"]
    if expected["ok"]:
        assert_array_equal(out.bits, bits(expected["data_bits"]))
        assert out.repaired[0] == expected["corrected_bits"]


def test_a_telecommand_codeblock_is_that_of_the_standard():
    """CCSDS 231.0-B: check bits inverted, a filler bit 0; all-zero information gives FE as last octet."""
    step = Bch(n=63, k=56, generator=0xC5, complement=True, filler=1)
    word = step.encode(np.zeros((1, 112), np.uint8))
    assert np.packbits(word).tobytes().hex() == "00000000000000fe" * 2


@pytest.mark.parametrize("generator", ["C75", "AE3"])
def test_golay_weights_are_the_published_ones(generator):
    """MacWilliams and Sloane, The Theory of Error-Correcting Codes, chapter 2 and 20."""
    assert code_weights(Golay(n=23, generator=generator).code.generator) == {
        0: 1, 7: 253, 8: 506, 11: 1288, 12: 1288, 15: 506, 16: 253, 23: 1}
    assert code_weights(Golay(n=24, generator=generator).code.generator) == {0: 1, 8: 759, 12: 2576, 16: 759, 24: 1}


def matrix(step):
    """The generator matrix of a code, by its encoder."""
    return step.encode(np.eye(step.data_bits(step.size), dtype=np.uint8))


@pytest.mark.parametrize(("n", "k", "weights"), [
    (15, 11, {0: 1, 3: 35, 4: 105, 5: 168, 6: 280, 7: 435, 8: 435, 9: 280, 10: 168, 11: 105, 12: 35, 15: 1}),
    (15, 7, {0: 1, 5: 18, 6: 30, 7: 15, 8: 15, 9: 30, 10: 18, 15: 1}),
    (15, 5, {0: 1, 7: 15, 8: 15, 15: 1}),
    (31, 21, {0: 1, 5: 186, 6: 806, 7: 2635, 8: 7905, 9: 18910, 10: 41602, 11: 85560, 12: 142600, 13: 195300,
              14: 251100, 15: 301971, 16: 301971, 17: 251100, 18: 195300, 19: 142600, 20: 85560, 21: 41602, 22: 18910,
              23: 7905, 24: 2635, 25: 806, 26: 186, 31: 1}),
])
def test_weights_of_small_codes_are_the_published_ones(n, k, weights):
    """Lin and Costello, Error Control Coding, and public tables of weight distributions; from memory."""
    assert code_weights(matrix(Bch(n=n, k=k))) == weights


@pytest.mark.parametrize("entry", entries("hsiao_weight4"))
def test_hsiao_code_has_as_many_words_of_weight_4_as_published(entry):
    """All 56 columns of weight 3, the 8 shifts of one of weight 5, 8 unit columns: H of the (72,64) code."""
    columns = [c for c in range(256) if c.bit_count() == 3]
    five = int(entry["params"]["weight5_column"], 2)
    columns += [(five << s | five >> (8 - s)) & 255 for s in range(8)] + [1 << i for i in range(8)]
    parity = np.array([[c >> i & 1 for c in columns] for i in range(8)], np.uint8)
    weights = code_weights(generator_of(parity))
    expected = entry["expected"]
    assert weights is not None and weights[4] == expected["A4"], entry["source"]
    assert 4 * weights[4] == expected["miscorrected_triples"]


EVERY = [
    (Golay(n=23), 3), (Golay(n=24), 3), (Bch(n=15, k=5), 3), (Bch(n=31, k=21), 2), (Bch(n=32, k=21, extended=True), 2),
    (Bch(n=24, k=14, m=5), 2), (Bch(n=63, k=56, generator=0xC5, complement=True), 1),
]


@pytest.mark.parametrize(("step", "t"), EVERY, ids=str)
def test_every_error_pattern_up_to_t_is_corrected(step, t):
    n = step.coded_bits(step.data_bits(step.n))
    data = np.random.default_rng(5).integers(0, 2, (1, step.data_bits(n)), np.uint8)
    word = step.encode(data)
    for e in range(t + 1):
        patterns = list(combinations(range(n), e))
        came = np.repeat(word, len(patterns), axis=0)
        for row, pattern in enumerate(patterns):
            came[row, list(pattern)] ^= 1
        out = step.decode(Batch(came))
        assert (out.bits == data).all() and (out.fault == OK).all() and (out.repaired == e).all()
        assert out.headroom == pytest.approx(1 - e / t)


@pytest.mark.parametrize("step", [Golay(n=24), Bch(n=32, k=21, extended=True),
                                  Bch(n=63, k=56, generator=0xC5, complement=True)], ids=str)
def test_one_error_more_than_t_is_found_where_the_distance_is_even(step):
    n = step.coded_bits(step.data_bits(step.n))
    t = 3 if isinstance(step, Golay) else step.errors
    word = step.encode(np.random.default_rng(6).integers(0, 2, (1, step.data_bits(n)), np.uint8))
    patterns = list(combinations(range(n), t + 1))[:: 7]
    came = np.repeat(word, len(patterns), axis=0)
    for row, pattern in enumerate(patterns):
        came[row, list(pattern)] ^= 1
    out = step.decode(Batch(came))
    assert (out.fault == UNCORRECTABLE).all()
    assert_array_equal(out.bits, came[:, : out.bits.shape[1]])


@pytest.mark.parametrize("keys", [{"m": 8, "t": 8}, {"m": 10, "t": 20}, {"m": 14, "t": 12}, {"n": 200, "m": 8, "t": 4},
                                  {"n": 1000, "m": 12, "t": 9, "extended": True}], ids=str)
def test_long_codes_correct_t_errors_in_every_codeword(keys):
    step = Bch(**keys)
    rng = np.random.default_rng(7)
    k = step.data_bits(step.size)
    data = rng.integers(0, 2, (6, 2 * k), np.uint8)
    word = step.encode(data)
    for e in (1, step.errors):
        came = word.copy()
        for row in came:
            for c in range(2):
                row[c * step.size + rng.choice(step.size, e, replace=False)] ^= 1
        out = step.decode(Batch(came))
        assert_array_equal(out.bits, data)
        assert (out.repaired == 2 * e).all()


def test_decoding_agrees_with_a_reference_library():

    step, other = Bch(n=63, k=39, poly=0x43), galois.BCH(63, 39)
    rng = np.random.default_rng(2)
    data = rng.integers(0, 2, (30, 39), np.uint8)
    word = step.encode(data)
    assert_array_equal(word, np.asarray(other.encode(data)))
    for e in (4, 5):
        came = word.copy()
        for row in came:
            row[rng.choice(63, e, replace=False)] ^= 1
        out = step.decode(Batch(came))
        theirs, count = other.decode(came, errors=True)
        assert_array_equal(out.fault == OK, count >= 0)
        assert_array_equal(out.bits[count >= 0], np.asarray(theirs)[count >= 0])


@pytest.mark.parametrize("step", [Bch(n=15, k=7), Bch(n=16, k=7, extended=True)], ids=str)
def test_erased_bits_cost_half_an_error(step):
    n = step.n
    word = step.encode(np.random.default_rng(1).integers(0, 2, (1, 7), np.uint8))
    for erased in combinations(range(n), 4):
        came, doubt = word.copy(), np.zeros((1, n), np.uint8)
        doubt[0, list(erased)] = 255
        came[0, list(erased)] = 0
        out = step.decode(Batch(came, doubt))
        assert (out.bits == word[:, :7]).all() and out.fault[0] == OK and (out.doubt == 0).all()


@pytest.mark.parametrize("step", [Bch(n=15, k=7), Bch(n=16, k=7, extended=True), Bch(n=63, k=56, generator=0xC5)],
                         ids=str)
def test_random_words_are_accepted_as_often_as_counted(step):
    words = np.random.default_rng(3).integers(0, 2, (30000, step.n), np.uint8)
    share, p = (step.decode(Batch(words)).fault == OK).mean(), step.accepted_share()
    assert abs(share - p) < 4 * np.sqrt(p * (1 - p) / 30000)


@pytest.mark.parametrize(("keys", "key", "words"), [
    ({"n": 31, "k": 20}, "k", "10 \\(k = 21, t = 2\\)"),
    ({"n": 40, "m": 5, "k": 20}, "n", "at most 2\\*\\*5 - 1 = 31"),
    ({"m": 5}, "k", "one of them"),
    ({"n": 31, "k": 21, "generator": 0x76B}, "generator", "divisor of x\\^31 \\+ 1"),
    ({"n": 31, "k": 21, "generator": 0x769, "t": 3}, "t", "at most 2"),
    ({"n": 31, "t": 2, "k": 22}, "k", "21 \\(the generator has degree 10"),
    ({"n": 31, "k": 21, "poly": 0x3F}, "poly", "not primitive"),
])
def test_parameters_that_cannot_work_are_told(keys, key, words):
    with pytest.raises(ParameterError, match=words) as caught:
        Bch(**keys)
    assert caught.value.key == key
