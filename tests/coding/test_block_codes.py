"""Hamming and other linear codes: textbook weights, published words, every error pattern up to t."""

from itertools import combinations, product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal
from published import bits, cyclic_generator, entries, text

from pcaptool.coding.block_code import BlockCode
from pcaptool.coding.hamming import Hamming
from pcaptool.coding.linear import PIECE, code_weights, parity_check
from pcaptool.coding.repeat import Repeat
from pcaptool.coding.step import OK, SHORT, UNCORRECTABLE, Batch, ParameterError
from pcaptool.coding.whiten import Whiten


def as_matrix(rows):
    return np.array([[int(c) for c in row] for row in rows], np.uint8)


@pytest.mark.parametrize("entry", entries("code_weights"))
def test_weights_equal_the_published_distribution(entry):
    generator = as_matrix(cyclic_generator(entry["params"]["code"]))
    expected = {int(w): count for w, count in entry["expected"].items()}
    assert code_weights(generator) == expected, entry["source"]


def test_weights_of_a_large_code_come_from_its_dual():
    h = Hamming(n=63, k=57)
    weights = code_weights(h.code.generator)        # 2**57 words, never listed
    assert weights[3] == 63 * 62 // 6 and sum(weights.values()) == 2**57
    assert code_weights(np.eye(30, 60, dtype=np.uint8)) is None


@pytest.mark.parametrize(("n", "k", "extended", "expected"), [
    (7, 4, False, {0: 1, 3: 7, 4: 7, 7: 1}),                # Lin and Costello; MacWilliams and Sloane
    (8, 4, True, {0: 1, 4: 14, 8: 1}),
    (15, 11, False, {0: 1, 3: 35, 4: 105, 5: 168, 6: 280, 7: 435, 8: 435, 9: 280, 10: 168, 11: 105, 12: 35, 15: 1}),
])
@pytest.mark.parametrize("layout", ["positional", "systematic"])
def test_hamming_weights_equal_the_textbook(n, k, extended, expected, layout):
    assert code_weights(Hamming(n=n, k=k, extended=extended, layout=layout).code.generator) == expected


def test_positional_check_bits_are_parities_of_position_numbers():
    data = np.array(list(product([0, 1], repeat=8)), np.uint8)
    word = Hamming(n=12, k=8).encode(data)
    numbers = np.arange(1, 13)
    for power in (1, 2, 4, 8):                              # Hamming (1950)
        assert not (word[:, (numbers & power) > 0].sum(axis=1) % 2).any()
    assert_array_equal(word[:, [2, 4, 5, 6, 8, 9, 10, 11]], data)
    assert_array_equal(Hamming(n=12, k=8, layout="systematic").encode(data)[:, :8], data)


def cyclic_step(params) -> BlockCode:
    return BlockCode(generator=cyclic_generator(params["code"]), t=params.get("t"))


@pytest.mark.parametrize("entry", entries("block_encode"))
def test_encode_equals_the_published_codeword(entry):
    code = entry["params"]["code"]
    word = cyclic_step(entry["params"]).encode(bits(entry["params"]["input_bits"]))
    if code.get("complement_parity"):                       # as a step of its own behind the code
        word = Whiten(sequence="00 00 00 00 00 00 00 FE").encode(word)
    assert text(word[0]) == entry["expected"], entry["source"]


@pytest.mark.parametrize("entry", entries("block_decode"))
def test_decode_equals_the_published_decision(entry):
    decoded = cyclic_step(entry["params"]).decode(Batch(bits(entry["params"]["input_bits"])))
    if not entry["expected"]["ok"]:
        assert decoded.fault == [UNCORRECTABLE] and decoded.headroom == [0]
        return
    assert decoded.fault == [OK]
    assert text(decoded.bits[0]) == entry["expected"]["data_bits"]
    assert decoded.repaired == [entry["expected"]["corrected_bits"]]


GOLAY = cyclic_generator({"n": 23, "k": 12, "g": "0xc75", "extend": "none"})
SECDED = [Hamming(n=8, k=4, extended=True), Hamming(n=13, k=8, extended=True),
          Hamming(n=72, k=64, extended=True, layout="systematic"), Hamming(n=39, k=32, extended=True)]
CODES = [Hamming(n=12, k=8), Hamming(n=7, k=4, layout="systematic"), Hamming(n=127, k=120), *SECDED,
         BlockCode(generator=GOLAY),
         BlockCode(generator=cyclic_generator({"n": 31, "k": 16, "g": "0x8faf", "extend": "none"})),
         BlockCode(generator=("1101000", "0110100", "0011010", "0001101")),         # not systematic
         BlockCode(parity=("1101100", "1011010", "0111001"))]


def ident(step) -> str:
    return f"{step.name}({step.code.n},{step.code.k})"


def patterns(n: int, weight: int, limit: int = 20_000):
    """Return error patterns of one weight: all, or evenly chosen ones where there are very many."""
    chosen = list(combinations(range(n), weight))
    wrong = np.array(chosen, np.int64).reshape(len(chosen), weight)
    wrong = wrong[:: -(-len(wrong) // limit)]
    out = np.zeros((len(wrong), n), np.uint8)
    out[np.arange(len(wrong))[:, None], wrong] = 1
    return out


@pytest.mark.parametrize("step", CODES, ids=ident)
def test_every_pattern_up_to_t_is_corrected_and_counted(step):
    code = step.code
    assert code.t >= 1
    for weight in range(code.t + 1):
        errors = patterns(code.n, weight)
        data = np.random.default_rng(weight).integers(0, 2, (len(errors), code.k), np.uint8)
        word = step.encode(data) ^ errors
        decoded = step.decode(Batch(word))
        assert not decoded.fault.any()
        assert_array_equal(decoded.bits, data)
        assert (decoded.repaired == weight).all()
        assert decoded.headroom == pytest.approx(np.full(len(data), 1 - weight / code.t))
        assert_array_equal(step.encode(decoded.bits) ^ word, errors)       # located


@pytest.mark.parametrize("step", SECDED, ids=ident)
def test_no_double_error_of_secded_is_silent(step):
    errors = patterns(step.n, 2)
    data = np.random.default_rng(2).integers(0, 2, (len(errors), step.k), np.uint8)
    word = step.encode(data) ^ errors
    decoded = step.decode(Batch(word))
    assert (decoded.fault == UNCORRECTABLE).all() and not decoded.repaired.any()
    assert_array_equal(decoded.bits, step.strip(word)[0])    # left as received


def test_a_syndrome_outside_the_shortened_code_is_given_up():
    """Positions 5 and 8 wrong point to position 13, which (12,8) does not have."""
    step = Hamming(n=12, k=8)
    word = step.encode(bits("10110010"))
    word[0, [4, 7]] ^= 1
    assert step.decode(Batch(word)).fault == [UNCORRECTABLE]
    word[0, [4, 7, 0, 1]] ^= 1                               # 1 and 2 wrong: 3 is repaired, wrongly
    assert step.decode(Batch(word)).fault == [OK]


def test_many_codewords_in_a_frame_are_judged_by_the_worst():
    step = Hamming(n=12, k=8)
    data = np.random.default_rng(3).integers(0, 2, (3, 5 * 8), np.uint8)
    word = step.encode(data)
    word[1, [0, 12, 59]] ^= 1                                # one error in each of three codewords
    word[2, [0, 28, 31]] ^= 1                                # positions 5 and 8 of the third
    decoded = step.decode(Batch(word))
    assert decoded.fault.tolist() == [OK, OK, UNCORRECTABLE]
    assert decoded.repaired.tolist() == [0, 3, 1]
    assert decoded.headroom.tolist() == [1, 0, 0]
    assert_array_equal(decoded.bits[:2], data[:2])


@pytest.mark.parametrize("step", CODES, ids=ident)
@settings(derandomize=True, deadline=None, max_examples=25)
@given(st.data())
def test_errors_and_erasures_within_the_distance_are_corrected(step, data):
    code = step.code
    erased = data.draw(st.integers(0, code.reach))
    errors = data.draw(st.integers(0, (code.reach - erased) // 2 if erased else code.t))
    places = data.draw(st.permutations(range(code.n)))
    message = np.array([data.draw(st.lists(st.integers(0, 1), min_size=code.k, max_size=code.k))], np.uint8)
    word = step.encode(message)
    doubt = np.zeros_like(word)
    for j in places[:erased]:
        doubt[0, j] = 255
        word[0, j] = data.draw(st.integers(0, 1))
    word[0, places[erased : erased + errors]] ^= 1
    decoded = step.decode(Batch(word, doubt))
    assert decoded.fault == [OK]
    assert_array_equal(decoded.bits, message)
    assert decoded.headroom[0] == pytest.approx(max(1 - (2 * errors + erased) / (2 * code.t), 0))


def test_more_erasures_than_the_distance_are_given_up():
    step = Hamming(n=12, k=8)
    word, doubt = step.encode(bits("10110010")), np.zeros((1, 12), np.uint8)
    doubt[0, :3] = 255
    assert step.decode(Batch(word, doubt)).fault == [UNCORRECTABLE]


def test_a_code_without_correction_only_finds_errors():
    step = BlockCode(generator=("101", "011"))              # even weight, distance 2
    decoded = step.decode(Batch(bits("101100"), None))
    assert step.code.t == 0 and decoded.headroom is None
    assert decoded.fault == [UNCORRECTABLE]
    assert step.decode(Batch(bits("101110"))).fault == [OK]


def test_a_parity_matrix_and_its_generator_are_one_code():
    by_parity = BlockCode(parity=("1101100", "1011010", "0111001"))
    by_generator = BlockCode(generator=("1000110", "0100101", "0010011", "0001111"))
    assert not (as_matrix(by_generator.generator) @ as_matrix(by_parity.parity).T % 2).any()
    data = np.array(list(product([0, 1], repeat=4)), np.uint8)
    assert_array_equal(by_parity.encode(data), by_generator.encode(data))
    by_number = BlockCode(generator=(0b1000110, 0b0100101, 0b0010011, 0b0001111), n=7)
    assert_array_equal(by_number.encode(data), by_generator.encode(data))


@settings(derandomize=True, deadline=None, max_examples=40)
@given(st.integers(1, 6), st.integers(1, 6), st.randoms(use_true_random=False))
def test_any_full_rank_generator_round_trips(k, r, random):
    matrix = np.eye(k, k + r, dtype=np.uint8)
    matrix[:, k:] = [[random.getrandbits(1) for _ in range(r)] for _ in range(k)]
    for _ in range(10):                                     # mix rows and columns
        a, b = random.randrange(k), random.randrange(k)
        if a != b:
            matrix[a] ^= matrix[b]
    matrix = matrix[:, random.sample(range(k + r), k + r)]
    step = BlockCode(generator=tuple(text(row) for row in matrix))
    data = np.array(list(product([0, 1], repeat=k)), np.uint8)
    word = step.encode(data)
    assert_array_equal(word, data @ matrix % 2)
    assert_array_equal(step.decode(Batch(word)).bits, data)
    assert not (word @ parity_check(matrix).T % 2).any()


@pytest.mark.parametrize(("make", "key", "words"), [
    (lambda: Hamming(n=12, k=9), "k", ("found 9, expected 8 (n = 12 needs 4 check bits, since 2**4 >= 12 + 1)",
                                       "set k = 8, or n = 13")),
    (lambda: Hamming(n=16, k=11), "n", ("found 16, expected 15", "set n = 15, or extended = true")),
    (lambda: Hamming(n=4, k=8), "n", ("found 4, expected 12", "set n = 12")),
    (lambda: Hamming(n=12, k=8, extended=True), "k", ("found 8, expected 7", "set k = 7, or n = 13")),
    (lambda: BlockCode(), "generator", ("no matrix",)),
    (lambda: BlockCode(generator=("110", "11")), "generator", ("rows of 3 bits",)),
    (lambda: BlockCode(generator=("1100", "0011", "1111")), "generator", ("rank 2",)),
    (lambda: BlockCode(parity=("100", "010", "001")), "parity", ("0 rows",)),
    (lambda: BlockCode(generator=(0b110, 0b011)), "n", ("no n",)),
    (lambda: BlockCode(generator=("1110", "0111"), t=1), "t", ("distance 3",)),
    (lambda: BlockCode(generator=tuple(format(1 << i | 3 << 40, "060b") for i in range(30))), "t", ("no t",)),
    (lambda: BlockCode(generator=GOLAY, t=9), "t", ("at most 1048576 patterns",)),
])
def test_impossible_parameters_name_the_key(make, key, words):
    with pytest.raises(ParameterError) as caught:
        make()
    assert caught.value.key == key
    for word in words:
        assert word in str(caught.value)


@pytest.mark.parametrize("order", ["bit", "word"])
def test_repetition_outvotes_errors_and_gives_up_ties(order):
    three, four = Repeat(times=3, order=order), Repeat(times=4, order=order)
    data = bits("1011")
    for step in (three, four):
        word = step.encode(data)
        assert text(word[0]) == (text(data[0]) * step.times if order == "word"
                                 else "".join(c * step.times for c in text(data[0])))
        word[0, 0] ^= 1
        decoded = step.decode(Batch(word))
        assert decoded.fault == [OK] and decoded.repaired == [1] and decoded.headroom == [0]
        assert_array_equal(decoded.bits, data)
    second = 4 if order == "word" else 1
    tied = four.encode(data)
    tied[0, [0, second]] ^= 1
    assert four.decode(Batch(tied)).fault == [UNCORRECTABLE]
    doubt = np.zeros_like(tied)
    doubt[0, 0] = 255                                       # an erased copy has no vote
    decoded = four.decode(Batch(tied, doubt))
    assert decoded.fault == [OK] and decoded.repaired == [2]
    assert_array_equal(decoded.bits, data)


@pytest.mark.parametrize("step", [Hamming(n=12, k=8), Repeat(times=3), BlockCode(generator=GOLAY)])
def test_a_length_that_no_word_has_is_short(step):
    assert step.decode(Batch(np.zeros((2, 25), np.uint8))).fault.tolist() == [SHORT, SHORT]


def test_a_long_batch_gives_the_rows_of_its_parts():
    """Decoding works through a batch in pieces; their seams must not show."""
    step = Hamming(n=12, k=8)
    words = np.random.default_rng(7).integers(0, 2, (2 * PIECE + 5, 36), np.uint8)
    whole = step.decode(Batch(words))
    for cut in (1, PIECE - 1, PIECE + 3):
        for part in (slice(cut), slice(cut, None)):
            some = step.decode(Batch(words[part]))
            for field in ("bits", "fault", "repaired", "headroom"):
                assert_array_equal(getattr(some, field), getattr(whole, field)[part])
