"""Whitening: adding a fixed or pseudo-random sequence, so that the air sees no long runs."""

import re
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, ClassVar, Literal

import numpy as np
from annotated_types import Ge, Le
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.step import NO_CONTEXT, Batch, Bits, Context, Decoded, ParameterError, Step, whole


def delays_of(poly: str | int) -> tuple[int, ...]:
    """Return the delays d of the recurrence s[n] = sum s[n - d] that a polynomial writes.

    Text as ``x^9 + x^5 + 1`` or a number with one bit per term, its degree included. The term of
    degree m and the constant are the ends; a term x^j between them is a delay of m - j: the sequence
    obeys s[n + m] = sum of s[n + j] over the lower terms.
    """
    if isinstance(poly, str):
        terms = [t.strip() for t in poly.replace("**", "^").split("+")]
        exponents = []
        for term in terms:
            match = re.fullmatch(r"x(?:\^?(\d+))?|1", term)
            if not match:
                raise ParameterError("poly", found=repr(term), expected="terms like x^9, x and 1",
                                     fix='write the polynomial as "x^9 + x^5 + 1"')
            exponents.append(0 if term == "1" else int(match.group(1) or 1))
    else:
        exponents = [j for j in range(poly.bit_length()) if poly >> j & 1]
    degree = max(exponents, default=0)
    if degree > 63:
        raise ParameterError("poly", found=f"degree {degree}", expected="a degree of at most 63",
                             fix="check the highest term, or give the sequence itself")
    if degree < 1 or 0 not in exponents:
        raise ParameterError("poly", found=repr(poly), expected="a highest term x^m and the constant 1",
                             fix='write both ends, as in "x^9 + x^5 + 1"')
    return tuple(sorted(degree - j for j in exponents if j != degree))


@lru_cache(maxsize=1024)
def lfsr(delays: tuple[int, ...], seed: int, n: int) -> Bits:
    """Return the first n bits of s[i] = sum of s[i - d] over GF(2), uint8 (n,).

    seed  the first max(delays) bits of the sequence, first bit most significant
    """
    m = max(delays)
    s = np.zeros(max(n, m), np.uint8)
    for j in range(m):
        s[j] = seed >> (m - 1 - j) & 1
    for i in range(m, n):
        bit = 0
        for d in delays:
            bit ^= int(s[i - d])
        s[i] = bit
    s.setflags(write=False)
    return s[:n]


@lru_cache(maxsize=1024)
def galois_lfsr(delays: tuple[int, ...], seed: int, n: int) -> Bits:
    """Return the first n bits that leave a Galois register, uint8 (n,).

    The register has positions 0 .. m - 1, position 0 in the seed's most significant bit; the last
    position leaves, enters position 0 and is added at position m - d for every other delay d.
    """
    m = max(delays)
    register = [seed >> (m - 1 - j) & 1 for j in range(m)]
    taps = {m - d for d in delays if d != m}
    out = np.zeros(n, np.uint8)
    for i in range(n):
        leaving = register[-1]
        out[i] = leaving
        register = [leaving, *register[:-1]]
        for j in taps:
            register[j] ^= leaving
    out.setflags(write=False)
    return out


@dataclass(frozen=True, slots=True, kw_only=True)
class Whiten(Step):
    """An additive sequence: an LFSR, or fixed octets repeated."""

    name: ClassVar[str] = "whiten"
    role = "order"

    poly: Annotated[str | int, Doc('recurrence, "x^9 + x^5 + 1" or one bit per term')] = 0
    seed: Annotated[int, Ge(0), Doc("register; see form for its meaning")] = 0
    form: Annotated[Literal["first bits", "history", "galois"],
                    Doc('"first bits": the sequence begins with the seed, most significant bit first; '
                        '"history": the seed holds the bits before the first, its highest the latest; '
                        '"galois": the seed is the register x^0 .. x^(m-1), most significant bit x^0, '
                        "and the bit that leaves is added at every term")] = "first bits"
    reciprocal: Annotated[bool, Doc("run the recurrence of the reversed polynomial")] = False
    pack: Annotated[Literal["msb", "lsb"], Doc("where each octet's first sequence bit goes")] = "msb"
    skip_sequence: Annotated[int, Ge(0), Le(1 << 20), Doc("sequence bits thrown away at the start")] = 0
    invert: Annotated[bool, Doc("invert the sequence")] = False
    sequence: Annotated[str, Doc("fixed octets in hex, repeated, instead of poly and seed")] = ""
    seed_from: Annotated[str, Doc('wrapper field that is added (XOR) to the seed, "wrapper.NAME"')] = ""
    skip: Annotated[int, Ge(0), Doc("first bits left clear")] = 0

    def __post_init__(self) -> None:
        if self.sequence:
            try:
                octets = bytes.fromhex(self.sequence)
            except ValueError:
                octets = b""
            if not octets:
                raise ParameterError("sequence", found=repr(self.sequence), expected="octets in hex",
                                     fix='write for example "FF 48 0E C0"')
            if self.poly:
                raise ParameterError("sequence", found="sequence and poly", expected="one of them",
                                     fix="leave one out")
            return
        if not self.poly:
            raise ParameterError("poly", found="no poly", expected="poly and seed, or sequence",
                                 fix='set poly = "x^9 + x^5 + 1" and seed')
        degree = max(delays_of(self.poly))
        if self.seed_from:
            if not self.seed_from.startswith("wrapper."):
                raise ParameterError("seed_from", found=repr(self.seed_from), expected="a wrapper field",
                                     fix='write "wrapper.NAME"')
        elif self.seed == 0 or self.seed >> degree:
            raise ParameterError("seed", found=hex(self.seed), expected=f"1 to {hex(2**degree - 1)}",
                                 fix=f"give the {degree} bits of the register; all zero makes no sequence")

    @property
    def needs(self) -> tuple[str, ...]:
        return (self.seed_from.removeprefix("wrapper."),) if self.seed_from else ()

    def coded_bits(self, k: int) -> int:
        return k

    def data_bits(self, n: int) -> int:
        return n

    def _stream(self, n: int, seed: int) -> Bits:
        """Return the first n bits of the sequence as the register gives them."""
        n += self.skip_sequence
        if self.sequence:
            bits = np.resize(np.unpackbits(np.frombuffer(bytes.fromhex(self.sequence), np.uint8)), n)
        else:
            delays = delays_of(self.poly)
            m = max(delays)
            if self.reciprocal:
                delays = tuple(sorted([m, *(m - d for d in delays if d != m)]))
            if self.form == "galois":
                bits = galois_lfsr(delays, seed, n)
            elif self.form == "history":
                earliest_first = int(format(seed, f"0{m}b")[::-1], 2)
                bits = lfsr(delays, earliest_first, n + m)[m:]
            else:
                bits = lfsr(delays, seed, n)
        return bits[self.skip_sequence :]

    def mask(self, n: int, seed: int) -> Bits:
        """Return the bits added to a word of n bits: uint8 (n,)."""
        length = max(n - self.skip, 0)
        bits = self._stream(-(-length // 8) * 8, seed)
        if self.pack == "lsb":
            bits = bits.reshape(-1, 8)[:, ::-1].reshape(-1)
        bits = bits[:length] ^ np.uint8(self.invert)
        return np.concatenate([np.zeros(min(self.skip, n), np.uint8), bits])

    def _masks(self, n: int, seeds: NDArray[np.int64]) -> Bits:
        """Return the mask of every seed, uint8 (seed, n): the sum of the masks of the seed's bits."""
        zero = self.mask(n, 0)
        masks = np.repeat(zero[None], len(seeds), axis=0)
        for j in range(max(delays_of(self.poly))):
            masks[(seeds >> j & 1) == 1] ^= self.mask(n, 1 << j) ^ zero
        return masks

    def _add(self, bits: Bits, context: Context) -> Bits:
        if not self.seed_from:
            return bits ^ self.mask(bits.shape[1], self.seed)
        seeds, seed_of = np.unique(context[self.needs[0]] ^ self.seed, return_inverse=True)
        return bits ^ self._masks(bits.shape[1], seeds)[seed_of]

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        return self._add(data, context)

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        return self._add(word, context), None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        return whole(batch, self._add(batch.bits, context), batch.doubt)
