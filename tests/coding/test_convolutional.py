"""Convolutional codes: published words and spectra, exhaustive search, measured error rates beside the bound."""

from itertools import product
from math import comb

import numpy as np
import pytest
from numpy.testing import assert_array_equal
from published import bits, entries, text

from pcaptool.coding.convolutional import Convolutional
from pcaptool.coding.step import OK, SHORT, Batch, LengthError, ParameterError
from pcaptool.coding.trellis import distance_spectrum, free_distance


def step_of(p, tail):
    return Convolutional(constraint_length=p["K"], generators=tuple(p["polys_octal"]), tail=tail,
                         inverted=tuple(p.get("invert", ())), puncture=tuple(p.get("puncture", ())))


@pytest.mark.parametrize("entry", entries("conv_encode"))
def test_published_words_are_encoded(entry):
    p = entry["params"]
    step = step_of(p, "zero" if p.get("tail_zeros") else "none")
    assert text(step.encode(bits(p["input_bits"]))[0]) == entry["expected"], entry["source"]


@pytest.mark.parametrize("entry", entries("conv_decode"))
def test_published_words_are_decoded(entry):
    p, expected = entry["params"], entry["expected"]
    step = step_of(p, "zero")
    out = step.decode(Batch(bits(p["input_bits"])))
    assert text(out.bits[0]) == expected["data_bits"], entry["source"]
    assert out.repaired[0] == expected["path_metric"]
    assert step.data_bits(len(p["input_bits"])) == p["data_bits"]


@pytest.mark.parametrize("entry", entries("conv_spectrum"))
def test_the_distance_spectrum_is_the_published_one(entry):
    p, expected = entry["params"], entry["expected"]
    generators = [int(g, 8) for g in p["polys_octal"]]
    puncture = p.get("puncture", ["1"] * len(generators))
    a, c = distance_spectrum(generators, puncture, p["up_to_weight"])
    d = expected["dfree"]
    assert free_distance(generators, puncture) == d and not any(a[:d])
    assert a[d:] == expected["a_d"] and c[d:] == expected["c_d"], entry["source"]


@pytest.mark.parametrize(("generators", "distance"), [
    ((0o7, 0o5), 5), ((0o17, 0o13), 6), ((0o35, 0o23), 7), ((0o75, 0o53), 8), ((0o171, 0o133), 10),
    ((0o371, 0o247), 10), ((0o561, 0o753), 12), ((0o1167, 0o1545), 12), ((0o4335, 0o5723), 15),
    ((0o21675, 0o27123), 16), ((0o55367, 0o63121), 18), ((0o7, 0o7, 0o5), 8), ((0o15, 0o13, 0o17), 10),
])
def test_free_distances_of_the_best_codes(generators, distance):
    """Tables of codes of maximum free distance: Larsen (1973), Lin and Costello; from memory."""
    assert free_distance(generators, ["1"] * len(generators)) == distance


SHORT_CODES = [
    {"constraint_length": 3, "generators": ("7", "5")},
    {"constraint_length": 3, "generators": ("7", "5"), "tail": "biting"},
    {"constraint_length": 3, "generators": ("7", "5"), "tail": "none", "inverted": (0, 1)},
    {"constraint_length": 3, "generators": ("7", "5"), "tail": "stream"},
    {"constraint_length": 4, "generators": ("17", "13"), "puncture": ("110", "101")},
    {"constraint_length": 4, "generators": ("17", "13"), "feedback": "17"},
    {"constraint_length": 4, "generators": ("13", "15", "17"), "tail": "biting"},
    {"constraint_length": 7, "generators": ("171", "133"), "tail": "biting"},
]
K_BITS = 9


def every_word(step):
    """Return (data, side, word) of every message of K_BITS, and of every start state where that is open."""
    data = np.array(list(product((0, 1), repeat=K_BITS)), np.uint8)
    if step.tail != "stream":
        return data, step.encode(data)
    sides = np.array(list(product((0, 1), repeat=step.memory)), np.uint8)
    words = [step.encode(data, side=np.repeat(side[None], len(data), axis=0)) for side in sides]
    return np.tile(data, (len(sides), 1)), np.concatenate(words)


@pytest.mark.parametrize("keys", SHORT_CODES, ids=str)
@pytest.mark.parametrize("soft", [False, True])
def test_the_path_found_is_the_most_likely_of_all(keys, soft):
    """Exhaustive search over all messages: no codeword is nearer to what was received."""
    step = Convolutional(**keys)
    data, words = every_word(step)
    rng = np.random.default_rng(11)
    received = words[rng.integers(0, len(words), 60)] ^ (rng.random((60, words.shape[1])) < 0.15)
    received = received.astype(np.uint8)
    levels = rng.integers(0, 8, received.shape) if soft else np.full(received.shape, 7)
    doubt = np.rint(255 - levels * (255 / 7)).astype(np.uint8)
    out = step.decode(Batch(received, doubt if soft else None))
    cost = np.array([((words != r) * level).sum(axis=1) for r, level in zip(received, levels, strict=True)])
    again = step.encode(out.bits, side=out.side)
    assert_array_equal(((again != received) * levels).sum(axis=1), cost.min(axis=1))
    assert (out.fault == OK).all()
    assert_array_equal(out.repaired, (again != received).sum(axis=1))


def test_erased_bits_count_for_nothing():
    step = Convolutional(constraint_length=7, generators=("171", "133"))
    rng = np.random.default_rng(1)
    data = rng.integers(0, 2, (200, 60), np.uint8)
    word = step.encode(data)
    erased = rng.random(word.shape) < 0.25              # a rate 1/2 code fills a quarter of its bits in
    came = np.where(erased, rng.integers(0, 2, word.shape), word).astype(np.uint8)
    out = step.decode(Batch(came, (erased * 255).astype(np.uint8)))
    assert (out.bits == data).all(axis=1).mean() > 0.97
    blind = step.decode(Batch(came))
    assert (blind.bits == data).all(axis=1).mean() < 0.9


@pytest.mark.parametrize("frames", [1, 7, 8, 191, 192, 193, 400])
def test_frames_side_by_side_do_not_touch_each_other(frames):
    step = Convolutional(constraint_length=5, generators=("35", "23"))
    rng = np.random.default_rng(frames)
    word = step.encode(rng.integers(0, 2, (frames, 45), np.uint8))
    came = word ^ (rng.random(word.shape) < 0.08).astype(np.uint8)
    out = step.decode(Batch(came))
    for row in range(0, frames, 37):
        alone = step.decode(Batch(came[row : row + 1]))
        assert_array_equal(alone.bits[0], out.bits[row])
        assert alone.repaired[0] == out.repaired[row]


@pytest.mark.parametrize("entry", entries("conv_ber_simulation"))
def test_the_error_rate_on_a_symmetric_channel_is_the_measured_one(entry):
    """Beside it the union bound: the first terms of the spectrum times the odds of a wrong path of that weight."""
    p, expected = entry["params"], entry["expected"]
    step = step_of(p, "zero")
    rng = np.random.default_rng(3)
    frames, k = 400, p["data_bits_per_frame"]
    data = rng.integers(0, 2, (frames, k), np.uint8)
    word = step.encode(data)
    out = step.decode(Batch(word ^ (rng.random(word.shape) < p["bsc_p"]).astype(np.uint8)))
    wrong = out.bits != data
    errors = wrong.any(axis=1).mean()
    fer = expected["frame_error_rate"]
    assert abs(errors - fer) < 4 * np.sqrt(fer * (1 - fer) / frames)
    assert wrong.mean() == pytest.approx(expected["ber"], rel=0.3)     # bursts of errors: 400,000 bits spread so far


@pytest.mark.parametrize("entry", [e for e in entries("fec_probability")
                                   if e.values[0]["params"]["model"] == "conv_union_bound_bsc"])
def test_the_union_bound_follows_from_the_spectrum(entry):
    """P_b <= sum c_d P_d, P_d the odds that more than half of d bits are wrong, half of the odds of a tie."""
    p = entry["params"]
    codes = {5: (0o7, 0o5), 10: (0o171, 0o133)}
    _, c = distance_spectrum(codes[p["dfree"]], ["1", "1"], p["dfree"] + min(len(p["c_d"]), 12) - 1)
    assert c[p["dfree"] :] == p["c_d"][:12]
    error, bound = p["p"], 0.0
    for d, weight in enumerate(p["c_d"], p["dfree"]):
        more = sum(comb(d, i) * error**i * (1 - error) ** (d - i) for i in range(d // 2 + 1, d + 1))
        tie = comb(d, d // 2) * (error * (1 - error)) ** (d // 2) / 2 if d % 2 == 0 else 0
        bound += weight * (more + tie)
    assert bound == pytest.approx(entry["expected"], rel=1e-9), entry["source"]


def test_the_measured_error_rate_stays_below_the_union_bound():
    step = Convolutional(constraint_length=3, generators=("7", "5"))
    bound = next(e.values[0]["expected"] for e in entries("fec_probability")
                 if e.values[0]["params"].get("p") == 0.01 and "c_d" in e.values[0]["params"])
    rng = np.random.default_rng(12)
    data = rng.integers(0, 2, (2000, 1000), np.uint8)
    word = step.encode(data)
    out = step.decode(Batch(word ^ (rng.random(word.shape) < 0.01).astype(np.uint8)))
    assert 0.1 * bound < (out.bits != data).mean() < bound


def test_a_long_frame_is_decoded_in_pieces_as_in_one(monkeypatch):
    step = Convolutional(constraint_length=7, generators=("171", "133"), puncture=("101", "110"))
    rng = np.random.default_rng(2)
    data = rng.integers(0, 2, (2, 30000), np.uint8)
    word = step.encode(data)
    came = word ^ (rng.random(word.shape) < 0.01).astype(np.uint8)
    pieces = step.decode(Batch(came))
    monkeypatch.setattr("pcaptool.coding.convolutional.WHOLE", 10**6)
    assert_array_equal(pieces.bits, step.decode(Batch(came)).bits)
    assert_array_equal(pieces.repaired, (step.encode(pieces.bits) != came).sum(axis=1))


def test_a_piece_of_a_stream_is_encoded_again_to_the_last_bit():
    whole = Convolutional(constraint_length=7, generators=("171", "133"), tail="none")
    step = Convolutional(constraint_length=7, generators=("171", "133"), tail="stream")
    data = np.random.default_rng(5).integers(0, 2, (20, 300), np.uint8)
    middle = whole.encode(data)[:, 200:500]
    out = step.decode(Batch(middle))
    assert_array_equal(out.bits[:, 8:-8], data[:, 108:242])
    assert_array_equal(step.encode(out.bits, side=out.side), middle)


def test_a_recursive_code_sends_its_data_and_ends_in_the_zero_state():
    """SUN FSK, recursive systematic, IEEE 802.15.4: feedback 17 octal; the tail drives the register to zero."""
    step = Convolutional(constraint_length=4, generators=("17", "13"), feedback="17")
    data = np.random.default_rng(5).integers(0, 2, (20, 50), np.uint8)
    word = step.encode(data)
    assert_array_equal(word[:, 0:100:2], data)
    state = np.zeros((20, 3), np.int64)                 # M0 M1 M2, by hand: r = b + M0 + M1 + M2, u1 = r + M1 + M2
    for t in range(53):
        b = word[:, 2 * t].astype(np.int64)
        r = (b + state.sum(axis=1)) % 2
        assert_array_equal(word[:, 2 * t + 1], (r + state[:, 1] + state[:, 2]) % 2)
        state = np.stack([r, state[:, 0], state[:, 1]], axis=1)
    assert not state.any()


def test_lengths_that_do_not_fit_are_short():
    step = Convolutional(constraint_length=3, generators=("7", "5", "7"))
    for n in (0, 1, 4, 6, 7):
        assert (step.decode(Batch(np.ones((2, n), np.uint8))).fault == SHORT).all()
    with pytest.raises(LengthError, match="too few"):
        step.encode(np.zeros((1, 0), np.uint8))


@pytest.mark.parametrize(("keys", "key", "words"), [
    ({"constraint_length": 7, "generators": ("171",)}, "generators", "2 to 8"),
    ({"constraint_length": 7, "generators": ("171", "189")}, "generators[1]", "octal digits"),
    ({"constraint_length": 6, "generators": ("171", "133")}, "generators[0]", "1 to K = 6 bits"),
    ({"constraint_length": 8, "generators": ("171", "133")}, "constraint_length", "7, the bits of the longest"),
    ({"constraint_length": 7, "generators": ("171", "133"), "puncture": ("101", "11")}, "puncture", "equal length"),
    ({"constraint_length": 7, "generators": ("171", "133"), "puncture": ("101",)}, "puncture", "2 rows"),
    ({"constraint_length": 7, "generators": ("171", "133"), "puncture": ("10", "10")}, "puncture", "without a 1"),
    ({"constraint_length": 7, "generators": ("171", "133"), "inverted": (1,)}, "inverted", "2 values"),
    ({"constraint_length": 3, "generators": ("5", "6")}, "generators", "common factor x \\+ 1"),
    ({"constraint_length": 4, "generators": ("13", "15"), "feedback": "17"}, "generators", "none equal"),
    ({"constraint_length": 4, "generators": ("17", "15"), "feedback": "17", "tail": "biting"}, "tail", "biting"),
])
def test_parameters_that_cannot_work_are_told(keys, key, words):
    with pytest.raises(ParameterError, match=words) as caught:
        Convolutional(**keys)
    assert caught.value.key == key
