"""The proof of undamaged frames says what encoding again says: for any chain, any frame, any number of wrong bits."""

from dataclasses import dataclass
from functools import lru_cache
from typing import ClassVar

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal
from test_contract import EXAMPLES, build

from pcaptool.coding import STEPS
from pcaptool.coding.chain import Chain
from pcaptool.coding.proof import LARGEST, compile_proof
from pcaptool.coding.proof_kernel import FRAMES, independent
from pcaptool.coding.step import NO_CONTEXT, LengthError, Step


@lru_cache
def reed_solomon_parity(n, k):
    """Return the parity bits of every unit data word of a Reed-Solomon code over GF(256): uint8 (8 k, 8 (n - k)).

    Division by g(x) = (x - 1)(x - a) ... (x - a^(n-k-1)), byte by byte, in the field of
    x^8 + x^4 + x^3 + x^2 + 1 with a = x. Lin and Costello, Error Control Coding, on cyclic encoding.
    """
    def times(a, b):
        out = 0
        for j in range(8):
            out ^= (a << j) * (b >> j & 1)
        for j in range(14, 7, -1):
            out ^= (0x11D << (j - 8)) * (out >> j & 1)
        return out

    generator, root = [1], 1                                    # highest power first
    for _ in range(n - k):
        generator = [a ^ times(root, b) for a, b in zip([*generator, 0], [0, *generator], strict=True)]
        root = times(root, 2)
    by = np.array([[times(g, value) for g in generator[1:]] for value in range(256)], np.uint8)
    remainder = np.zeros((8 * k, n - k), np.uint8)              # of each unit word
    units = np.packbits(np.eye(8 * k, dtype=np.uint8), axis=1)
    for byte in range(k):
        feedback = remainder[:, 0] ^ units[:, byte]
        remainder = np.hstack([remainder[:, 1:], np.zeros((8 * k, 1), np.uint8)]) ^ by[feedback]
    return np.unpackbits(remainder, axis=1)


@dataclass(frozen=True, slots=True, kw_only=True)
class Interleaved(Step):
    """Systematic Reed-Solomon codewords, their bytes taken in turn: a step of the length and strength of real ones."""

    name: ClassVar[str] = "stand-in"
    role = "code"
    n: int
    k: int
    depth: int = 1

    def coded_bits(self, k):
        if k != self.k * self.depth * 8:
            raise LengthError("not the data of these codewords")
        return self.n * self.depth * 8

    def data_bits(self, n):
        if n != self.n * self.depth * 8:
            raise LengthError("not these codewords")
        return self.k * self.depth * 8

    def encode(self, data, context=NO_CONTEXT, side=None):
        words = data.reshape(len(data), self.k, self.depth, 8).swapaxes(1, 2).reshape(-1, self.k * 8)
        parity = np.zeros((len(words), 8 * (self.n - self.k)), np.uint8)
        busy = words.any(axis=1)
        parity[busy] = (words[busy].astype(np.float32) @ reed_solomon_parity(self.n, self.k).astype(np.float32)) % 2
        parity = parity.reshape(len(data), self.depth, self.n - self.k, 8).swapaxes(1, 2)
        return np.hstack([data, parity.reshape(len(data), -1)])

    def strip(self, word, context=NO_CONTEXT):
        return word[:, : self.data_bits(word.shape[1])], None

    def decode(self, batch, context=NO_CONTEXT):
        raise AssertionError("a stand-in is never decoded")


@dataclass(frozen=True, slots=True, kw_only=True)
class Careless(Interleaved):
    """A step that breaks its promise: what it encodes is never what it strips."""

    def encode(self, data, context=NO_CONTEXT, side=None):
        return 1 - Interleaved.encode(self, data)


def step(name, **keys):
    return STEPS[name](**keys)


CRC = step("crc", standard="itu-t-v41")
MASK = step("whiten", poly="x^8 + x^7 + x^5 + x^3 + 1", seed=0xFF)
SYNC = step("sync", word="1ACFFC1D")
LONG = Chain((CRC, Interleaved(n=255, k=223, depth=5), MASK, SYNC))

CHAINS = {
    "nothing to check": (Chain((MASK,)), 64),
    "only a sync word": (Chain((SYNC,)), 40),
    "check": (Chain((CRC,)), 64),
    "check of bits": (Chain((step("crc", width=5, poly=0x15), step("pad", bits=3, value=5))), 64),
    "ignored pad": (Chain((CRC, step("pad", bits=8, ignored=True), step("pad", bits=8, at="start", value=0xA5))), 64),
    "hamming": (Chain((CRC, step("hamming", n=12, k=8), step("interleave", rows=33, columns=12),
                       step("pad", bits=4))), 248),
    "blocks with checks": (Chain((step("crc", standard="ieee-1815", every=16, first=8),)), 43 * 8),
    "not systematic": (Chain((step("block_code", generator=("1101000", "0110100", "0011010", "0001101")),
                              step("bit_order"))), 32),
    "extended, repeated": (Chain((step("hamming", n=39, k=32, extended=True, layout="systematic"),
                                  step("repeat", times=8))), 64),
    "three checks": (Chain((CRC, CRC, step("crc", width=24, poly=0x864CFB), SYNC)), 80),
    "reed-solomon": (Chain((CRC, Interleaved(n=64, k=48))), 46 * 8),
    "strong codeword": (Chain((Interleaved(n=255, k=223),)), 223 * 8),
    "weak codewords": (Chain((CRC, Interleaved(n=40, k=35, depth=7), step("bit_order"))), 243 * 8),
    "long": (LONG, 1113 * 8),
}
by_chain = pytest.mark.parametrize("name", CHAINS)


def undamaged_by_encoding(chain, air, context=NO_CONTEXT):
    """Strip and encode again, all steps at once: what the proof must say, and the data."""
    bits, sides = air, {}
    for i in reversed(range(len(chain.steps))):
        bits, side = chain.steps[i].strip(bits, context)
        if side is not None:
            sides[i] = side
    return (chain.encode(bits, context, sides) == air).all(axis=1), bits


def run(proof, air, gap=3):
    """Run a proof over frames in a buffer, gap bytes before each."""
    octets = np.packbits(air, axis=1)
    buffer = np.random.default_rng(1).integers(0, 256, (len(air), gap + octets.shape[1]), np.uint8)
    buffer[:, gap:] = octets
    return proof.run(buffer.reshape(-1), np.arange(len(air)) * buffer.shape[1] + gap)


def damaged(air, wrong, rng):
    """Return the frames with wrong[i] bits of frame i inverted."""
    out = air.copy()
    for row, count in zip(out, wrong, strict=True):
        row[rng.choice(len(row), min(count, len(row)), replace=False)] ^= 1
    return out


_compiled = {}


def proof_of(name):
    """Compile a chain once, for all of its data."""
    if name not in _compiled:
        chain, k = CHAINS[name]
        _compiled[name] = compile_proof(chain, chain.coded_bits(k) // 8)
    return _compiled[name]


@by_chain
@settings(max_examples=8)
@given(seed=st.integers(0, 1 << 20), most=st.sampled_from([0, 1, 2, 3, 40, 3000]))
def test_a_proof_says_what_encoding_again_says(name, seed, most):
    chain, k = CHAINS[name]
    rng = np.random.default_rng(seed)
    air = damaged(chain.encode(rng.integers(0, 2, (20, k), np.uint8)), rng.integers(0, most + 1, 20), rng)
    expected, stripped = undamaged_by_encoding(chain, air)
    proof = proof_of(name)
    good, data = run(proof, air)
    assert_array_equal(good, expected)
    assert proof.width == k
    assert_array_equal(proof.data_bits(data[good]), stripped[expected])


@by_chain
def test_every_single_wrong_bit_is_seen(name):
    chain, k = CHAINS[name]
    air = chain.encode(np.random.default_rng(4).integers(0, 2, (1, k), np.uint8))
    n = air.shape[1]
    some = np.unique(np.linspace(0, n - 1, 700).astype(int))
    wrong = air.repeat(len(some), axis=0)
    wrong[np.arange(len(some)), some] ^= 1
    assert_array_equal(run(proof_of(name), wrong)[0], undamaged_by_encoding(chain, wrong)[0])


@by_chain
def test_noise_is_not_proven(name):
    chain, k = CHAINS[name]
    noise = np.random.default_rng(5).integers(0, 2, (40, chain.coded_bits(k)), np.uint8)
    noise[0], noise[1] = 0, 1
    assert_array_equal(run(proof_of(name), noise)[0], undamaged_by_encoding(chain, noise)[0])


@pytest.mark.parametrize("entry", [e for e in EXAMPLES if build(e[0], e[1]).linear], ids=lambda e: e[0])
def test_every_linear_step_is_proven(entry):
    name, keys, k, fields = entry
    chain = Chain((build(name, keys),))
    chain = Chain((*chain.steps, step("pad", bits=8 - chain.coded_bits(k) % 8)))
    rng = np.random.default_rng(11)
    context = {field: np.full(60, values[0]) for field, values in fields.items()}
    air = damaged(chain.encode(rng.integers(0, 2, (60, k), np.uint8), context), rng.integers(0, 4, 60), rng)
    expected, stripped = undamaged_by_encoding(chain, air, context)
    proof = compile_proof(chain, air.shape[1] // 8, None, {field: values[0] for field, values in fields.items()})
    good, data = run(proof, air)
    assert_array_equal(good, expected)
    assert_array_equal(proof.data_bits(data[good]), stripped[expected])


@st.composite
def chains(draw):
    """A chain of any linear steps that makes whole bytes, with its data length."""
    steps = draw(st.lists(st.sampled_from([
        CRC, MASK, SYNC, step("crc", width=7, poly=0x09, at="start"), step("hamming", n=7, k=4),
        step("hamming", n=13, k=8, extended=True), step("repeat", times=3), step("interleave", rows=2, columns=2),
        step("pad", bits=5, value=9), step("pad", bits=3, at="start", ignored=True), step("bit_order", unit=2),
        step("checksum", kind="xor8"), step("checksum", kind="odd-parity", every_bits=4)]), min_size=1, max_size=5))
    fitting = []
    for k in range(8, 200):
        try:
            n = Chain(tuple(steps)).coded_bits(k)
        except LengthError:
            continue
        if n % 8 == 0 and n <= 2000:
            fitting.append(k)
    return (Chain(tuple(steps)), draw(st.sampled_from(fitting))) if fitting else (Chain((CRC,)), 8)


@settings(max_examples=60)
@given(chain_and_length=chains(), seed=st.integers(0, 1 << 20))
def test_any_chain_of_linear_steps_is_proven_like_encoding_again(chain_and_length, seed):
    chain, k = chain_and_length
    rng = np.random.default_rng(seed)
    air = damaged(chain.encode(rng.integers(0, 2, (24, k), np.uint8)), rng.integers(0, 4, 24), rng)
    expected, stripped = undamaged_by_encoding(chain, air)
    proof = compile_proof(chain, air.shape[1] // 8)
    good, data = run(proof, air)
    assert_array_equal(good, expected)
    assert_array_equal(proof.data_bits(data[good]), stripped[expected])


@pytest.mark.parametrize("name", ["hamming", "long", "nothing to check"])
def test_wanted_bits_come_in_the_order_asked_for(name):
    """Positions in any order, twice, past the data or left out."""
    chain, k = CHAINS[name]
    rng = np.random.default_rng(6)
    wanted = [*rng.permutation(k)[:50].tolist(), 0, 0, -1, k - 1, k, k + 99, *rng.permutation(k)[:80].tolist()]
    proof = compile_proof(chain, chain.coded_bits(k) // 8, wanted)
    air = chain.encode(rng.integers(0, 2, (300, k), np.uint8))
    air[::7, -1] ^= 1
    expected, stripped = undamaged_by_encoding(chain, air)
    good, words = run(proof, air)
    assert_array_equal(good, expected)
    assert words.shape == (300, -(-len(wanted) // 64))
    for j, position in enumerate(wanted):
        bits = words[good, j // 64] >> np.uint64(j % 64) & np.uint64(1)
        there = 0 <= position < k
        assert_array_equal(bits, stripped[good, position] if there else 0)


@pytest.mark.parametrize("channel", [0, 37])
def test_a_proof_is_for_its_context(channel):
    chain = Chain((CRC, step("whiten", poly="x^7 + x^4 + 1", seed=64, seed_from="wrapper.channel"), SYNC))
    rng = np.random.default_rng(7)
    at = {"channel": np.full(30, channel)}
    air = damaged(chain.encode(rng.integers(0, 2, (30, 80), np.uint8), at), rng.integers(0, 2, 30), rng)
    expected, stripped = undamaged_by_encoding(chain, air, at)
    proof = compile_proof(chain, air.shape[1] // 8, None, {"channel": channel})
    good, data = run(proof, air)
    assert_array_equal(good, expected)
    assert_array_equal(proof.data_bits(data[good]), stripped[expected])
    other = compile_proof(chain, air.shape[1] // 8, None, {"channel": channel ^ 1})
    assert not run(other, air)[0].any()


@pytest.mark.parametrize("frames", [0, 1, FRAMES - 1, FRAMES, FRAMES + 1, 3 * FRAMES + 5])
def test_any_number_of_frames_gives_the_same_rows(frames):
    chain, k = CHAINS["hamming"]
    rng = np.random.default_rng(8)
    air = damaged(chain.encode(rng.integers(0, 2, (frames, k), np.uint8)), rng.integers(0, 2, frames), rng)
    good, data = run(proof_of("hamming"), air)
    assert_array_equal(good, undamaged_by_encoding(chain, air)[0])
    for cut in (frames // 3, frames // 2):
        parts = [run(proof_of("hamming"), air[part]) for part in (slice(cut), slice(cut, None))]
        assert_array_equal(np.concatenate([p[0] for p in parts]), good)
        assert_array_equal(np.concatenate([p[1] for p in parts])[good], data[good])


def test_frames_where_no_proof_exists():
    chain, k = CHAINS["hamming"]
    assert compile_proof(chain, 49) is None                     # no such length
    assert compile_proof(chain, 0) is None
    assert compile_proof(Chain((CRC,)), LARGEST // 8 + 1) is None
    assert compile_proof(Chain((step("checksum", kind="internet"),)), 20) is None      # not linear
    assert compile_proof(Chain(()), 20) is None
    assert compile_proof(Chain((Careless(n=20, k=16),)), 20) is None    # 0 = 1


def test_steps_inside_that_are_not_linear_are_handed_the_data():
    chain = Chain((step("checksum", kind="internet"), CRC, MASK))
    air = chain.encode(np.random.default_rng(9).integers(0, 2, (5, 64), np.uint8))
    proof = compile_proof(chain, air.shape[1] // 8)
    assert proof.inner == 1 and proof.width == 80
    good, data = run(proof, air)
    assert good.all()
    assert_array_equal(proof.data_bits(data), chain.steps[0].encode(chain.decode(air).message))


def test_tables_of_a_long_frame_stay_small():
    """Each parity bit of an interleaved codeword depends on that codeword alone, and equal codewords share tables."""
    wanted = list(range(32))
    whole = compile_proof(LONG, 1279, wanted).nbytes
    one = compile_proof(Chain((Interleaved(n=255, k=223),)), 255, wanted).nbytes
    assert one < 300_000 and whole < 3_000_000


def test_independent_rows_span_the_same_space():
    """By counting: 2 ** rank different sums of rows of 10 bits, as many from the rows kept as from all."""
    rng = np.random.default_rng(10)
    for rank in range(6):
        basis = rng.integers(1, 1 << 10, rank)
        rows = np.array([np.bitwise_xor.reduce(basis[rng.random(rank) < 0.5]) if rank else 0 for _ in range(12)])
        kept = np.zeros(12, np.bool_)
        assert independent(rows.astype(np.uint64)[:, None], np.zeros(12, np.uint8), kept)

        def sums(some):
            out = {0}
            for row in some:
                out |= {one ^ int(row) for one in out}
            return out

        assert sums(rows[kept]) == sums(rows)
        assert len(sums(rows)) == 1 << kept.sum()
