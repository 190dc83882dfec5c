"""Line codes, self-synchronising scramblers, the convolutional interleaver: standards' tables and hand-worked cases."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_array_equal
from published import bits, entries, hex_bits, text

from pcaptool.coding.chain import Chain
from pcaptool.coding.golay import Golay
from pcaptool.coding.interleave import Interleave
from pcaptool.coding.line_code import THREE_OF_SIX, LineCode
from pcaptool.coding.reed_solomon import ReedSolomon
from pcaptool.coding.scramble import Scramble
from pcaptool.coding.step import Batch, LengthError

HAND = [  # kind and keys, data, air: by the definitions
    ({"kind": "manchester"}, "10110", "0110010110"),                # IEEE 802.3: 1 rises, 0 falls
    ({"kind": "manchester", "one": "10"}, "10110", "1001101001"),
    ({"kind": "nrzi"}, "0110100", "1110010"),                       # a 0 changes the level, from 0
    ({"kind": "nrzi", "toggle_on": 1}, "0110100", "0100111"),
    ({"kind": "differential"}, "1101", "1001"),
    ({"kind": "differential", "level": 1}, "1101", "0110"),
    # changes in the middle always, at the begin for a 0 (IEEE 802.5), level 0 before: 1 -> 01, 0 -> 01 again
    ({"kind": "differential_manchester"}, "10", "0101"),
    ({"kind": "differential_manchester"}, "11", "0110"),
    ({"kind": "three_of_six"}, "00001111", "010110101001"),         # 0 and F of the EN 13757-4 table
]


@pytest.mark.parametrize(("keys", "data", "air"), HAND, ids=str)
def test_line_codes_by_hand(keys, data, air):
    step = LineCode(**keys)
    assert text(step.encode(bits(data))[0]) == air
    out = step.decode(Batch(bits(air)))
    assert text(out.bits[0]) == data and out.doubt is None


def test_three_of_six_words_have_three_ones_and_differ():
    assert len(set(THREE_OF_SIX)) == 16 and all(word.bit_count() == 3 for word in THREE_OF_SIX)


@pytest.mark.parametrize("kind", ["manchester", "differential_manchester", "three_of_six"])
def test_one_wrong_bit_on_the_air_is_a_violation_that_is_erased(kind):
    step = LineCode(kind=kind)
    data = np.random.default_rng(1).integers(0, 2, (1, 12), np.uint8)
    word = step.encode(data)
    size, of_air = step._ratio
    for j in range(word.shape[1]):
        came = word.copy()
        came[0, j] ^= 1
        out = step.decode(Batch(came))
        group = j // of_air
        erased = set(np.flatnonzero(out.doubt[0] == 255).tolist())
        assert erased >= set(range(group * size, (group + 1) * size))
        wrong = np.flatnonzero(out.bits[0] != data[0])
        assert set(wrong.tolist()) <= erased
        # the second half is also what a differential code measures the next bit against; one wrong bit never
        # makes another three-of-six word
        most = 2 if kind == "differential_manchester" else size
        assert len(erased) <= most


def test_violations_are_erasures_for_the_decoder_behind():
    """Four wrong half bits in different symbols: too many errors for the code, as erasures few enough."""
    chain = Chain((ReedSolomon(n=15, k=11, m=4), LineCode(kind="manchester")))
    data = np.random.default_rng(2).integers(0, 2, (1, 44), np.uint8)
    air = chain.encode(data)
    air[0, [0, 10, 30, 90]] ^= 1
    out = chain.decode(air)
    assert out.reason[0] == 0 and out.wrong_bits[0] == 4
    assert_array_equal(out.message, data)
    assert out.error_position.tolist() == [0, 10, 30, 90]
    assert out.headroom[0] == 0


def test_the_surer_half_of_a_broken_manchester_bit_decides():
    step = LineCode(kind="manchester")
    out = step.decode(Batch(bits("110011"), np.array([[10, 200, 255, 0, 255, 0]], np.uint8)))
    assert text(out.bits[0]) == "001"        # begins with 1: falls, 0; ends with 0: falls, 0; ends with 1: rises, 1
    assert out.doubt[0].tolist() == [65, 0, 0]


def test_doubt_reaches_every_bit_that_depends_on_it():
    """Differential Manchester measures a bit against the pair before it."""
    step = LineCode(kind="differential_manchester")
    word, doubt = step.encode(bits("10110")), np.zeros((1, 10), np.uint8)
    word[0, 2:4] ^= 1
    doubt[0, 2:4] = 255
    out = step.decode(Batch(word, doubt))
    assert out.doubt[0].tolist() == [0, 255, 255, 0, 0]
    wrong = out.bits[0] != bits("10110")[0]
    assert (out.doubt[0][wrong] == 255).all()


def test_five_sure_bits_settle_a_three_of_six_word():
    step = LineCode(kind="three_of_six")
    for value in range(16):
        data = bits(f"{value:04b}")
        for j in range(6):
            word, doubt = step.encode(data), np.zeros((1, 6), np.uint8)
            word[0, j] ^= 1
            doubt[0, j] = 255
            out = step.decode(Batch(word, doubt))
            assert_array_equal(out.bits, data)
            assert not out.doubt.any()


@pytest.mark.parametrize("entry", entries("self_sync"))
def test_published_scrambler_outputs(entry):
    p = entry["params"]
    step = Scramble(poly=" + ".join(f"x^{d}" for d in sorted(p["delays"], reverse=True)) + " + 1")
    word = bits(p["input_bits"])
    out = step.encode(word) if p["direction"] == "scramble" else step.decode(Batch(word)).bits
    assert text(out[0]) == entry["expected"], entry["source"]


def test_a_descrambler_needs_no_seed_once_its_register_is_full():
    sent = Scramble(poly="x^17 + x^12 + 1", seed=0x155)
    data = np.random.default_rng(3).integers(0, 2, (4, 60), np.uint8)
    out = Scramble(poly="x^17 + x^12 + 1").decode(Batch(sent.encode(data)))
    assert_array_equal(out.bits[:, 17:], data[:, 17:])


@pytest.mark.parametrize("entry", entries("interleave_forney"))
def test_published_convolutional_interleaver(entry):
    p = entry["params"]
    step = Interleave(branches=p["I"], delay=p["M"], unit=8)
    word = hex_bits(entry["input_hex"])
    expected = bytes.fromhex(entry["expected"])
    if p["direction"] == "interleave":
        out = np.packbits(step.encode(word)).tobytes()
        assert out[: len(expected)] == expected and len(out) == len(expected) + 6, entry["source"]
    else:                                       # a receiver that goes on for ever sees the data 6 symbols late
        out = np.packbits(step.decode(Batch(np.pad(word, ((0, 0), (0, 48))))).bits).tobytes()
        assert out[:9] == expected[6:], entry["source"]


@pytest.mark.parametrize("entry", [e for e in entries("interleaver_fact")
                                   if e.values[0]["params"]["fact"].startswith("forney")])
def test_the_delay_of_the_dvb_interleaver(entry):
    """End to end I (I - 1) M symbols; the memory of one side is half of it."""
    p = entry["params"]
    added = Interleave(branches=p["I"], delay=p["M"], unit=8).added // 8
    assert entry["expected"] == (added if p["fact"] == "forney_total_delay" else added // 2), entry["source"]


def test_a_burst_is_spread_over_codewords_by_either_interleaver():
    data = np.random.default_rng(4).integers(0, 2, (1, 12 * 24), np.uint8)
    for interleaver in (Interleave(rows=24, columns=24), Interleave(branches=12, delay=2)):
        chain = Chain((Golay(n=24), interleaver))
        air = chain.encode(data)
        air[0, 200:236] ^= 1
        out = chain.decode(air)
        assert out.reason[0] == 0 and out.wrong_bits[0] == 36
        assert_array_equal(out.message, data)


@given(st.integers(0, 40))
def test_lengths_that_make_no_symbols_are_refused(n):
    for kind, size in (("manchester", 2), ("three_of_six", 6)):
        step = LineCode(kind=kind)
        if n % size:
            with pytest.raises(LengthError):
                step.data_bits(n)
        else:
            assert step.coded_bits(step.data_bits(n)) == n
