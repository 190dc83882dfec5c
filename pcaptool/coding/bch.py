"""Binary BCH codes, shortened and extended."""

from dataclasses import dataclass
from functools import lru_cache
from math import comb
from typing import Annotated, ClassVar

import numpy as np
from annotated_types import Ge, Le
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.bch_kernel import check_bits, correct
from pcaptool.coding.cyclic import product, remainder
from pcaptool.coding.differences import count_differences
from pcaptool.coding.field import Field, field, polynomial_text
from pcaptool.coding.step import (
    NO_CONTEXT,
    UNCORRECTABLE,
    Batch,
    Bits,
    Context,
    Decoded,
    LengthError,
    ParameterError,
    Step,
    too_short,
    whole,
)
from pcaptool.coding.strength import Codewords, Strength

PIECE = 8192        # codewords worked on at a time


def minimal_polynomial(f: Field, i: int) -> int:
    """Return the minimal polynomial over GF(2) of alpha^i, bit j for x^j: the product of (x - its conjugates)."""
    conjugates, j = [], i % f.order
    while j not in conjugates:
        conjugates.append(j)
        j = 2 * j % f.order
    coefficients = [1]                              # highest term first
    for c in conjugates:
        root = f.power(c)
        coefficients = [a ^ f.multiply(b, root) for a, b in zip([*coefficients, 0], [0, *coefficients], strict=True)]
    return int("".join(map(str, coefficients)), 2)


@lru_cache(maxsize=256)
def bch_generator(m: int, poly: int, t: int) -> int:
    """Return the generator of the narrow-sense BCH code: the least common multiple of the minimal polynomials of
    alpha^1 .. alpha^2t.
    """
    f = field(m, poly)
    generator, done = 1, set[int]()
    for j in range(1, 2 * t, 2):
        minimal = minimal_polynomial(f, j)
        if minimal not in done:
            generator = product(generator, minimal)
            done.add(minimal)
    return generator


@lru_cache(maxsize=64)
def designed_t(m: int, poly: int, generator: int) -> int:
    """Return t such that alpha^1 .. alpha^2t are roots of a generator polynomial."""
    f, t = field(m, poly), 0
    while 2 * t + 1 < f.order and remainder(generator, minimal_polynomial(f, 2 * t + 1)) == 0:
        t += 1
    return t


@dataclass(frozen=True, slots=True, eq=False)
class _Code:
    n: int                          # without the overall parity bit
    k: int
    t: int
    generator: int
    field: Field
    octets: NDArray[np.uint16]      # (t, 256) value of an octet at alpha^(2i+1)
    table: NDArray[np.uint64]       # (256, word) remainder that an octet leaves

    @property
    def even(self) -> bool:
        """True when 1 is a root: every codeword has even weight."""
        return self.generator.bit_count() % 2 == 0


@lru_cache(maxsize=64)
def _code(n: int, k: int, t: int, m: int, poly: int, generator: int) -> _Code:
    """Return the code; parameters that are 0 follow from the others. Raises ParameterError."""
    m = m or max(3, n.bit_length())
    order = (1 << m) - 1
    if m > 14:
        raise ParameterError("n", found=str(n), expected="at most 2**14 - 1 = 16383", fix="take a shorter code")
    n = n or order
    if n > order:
        raise ParameterError("n", found=str(n), expected=f"at most 2**{m} - 1 = {order}",
                             fix=f"set n = {order} or less, or a larger m")
    f = field(m, poly)
    if generator:
        t = t or designed_t(m, poly, generator)
        if remainder(1 << order | 1, generator):
            raise ParameterError(
                "generator", found=f"0x{generator:X} = {polynomial_text(generator)}",
                expected=f"a divisor of x^{order} + 1, as of every cyclic code of length 2**{m} - 1",
                fix="check the polynomial, its bit order, and m")
        if t > designed_t(m, poly, generator) or not t:
            raise ParameterError(
                "t", found=str(t), expected=f"at most {designed_t(m, poly, generator)}: alpha^1 .. alpha^"
                f"{2 * designed_t(m, poly, generator)} are roots of the generator",
                fix="leave t out, or take another field polynomial")
    elif t:
        generator = bch_generator(m, poly, t)
    else:
        t, generator = _by_check_bits(m, poly, n, k)
    r = generator.bit_length() - 1
    if r >= n:
        raise ParameterError("t", found=str(t), expected=f"less: {r} check bits leave no data in n = {n}",
                             fix="correct fewer errors, or take a larger m")
    if k and k != n - r:
        raise ParameterError("k", found=str(k), expected=f"{n - r} (the generator has degree {r}, n = {n})",
                             fix=f"set k = {n - r}, or leave it out")
    octets = np.zeros((t, 256), np.uint16)
    for i in range(t):
        for b in range(8):
            octets[i, 1 << b : 2 << b] = octets[i, : 1 << b] ^ np.uint16(f.power((2 * i + 1) * b))
    return _Code(n, n - r, t, generator, f, octets, _octet_table(generator, r))


def _by_check_bits(m: int, poly: int, n: int, k: int) -> tuple[int, int]:
    """Return (t, generator) of the BCH code with n - k check bits."""
    offered: list[tuple[int, int]] = []
    for t in range(1, 1 << (m - 1)):
        generator = bch_generator(m, poly, t)
        r = generator.bit_length() - 1
        if r == n - k and (not offered or r != offered[-1][0]):
            while bch_generator(m, poly, t + 1) == generator and 2 * t + 2 < 1 << m:
                t += 1                              # the same code corrects more than it was designed for
            return t, generator
        if r >= n:
            break
        offered.append((r, t))
    near = sorted(set(offered), key=lambda o: abs(o[0] - (n - k)))[:3]
    raise ParameterError(
        "k", found=f"{k}, so {n - k} check bits", expected="k with " + ", ".join(
            f"{r} (k = {n - r}, t = {t})" for r, t in sorted(near)) + f" check bits for n = {n}, m = {m}",
        fix="check n and k; a shortened code keeps n - k of the full one")


def _octet_table(generator: int, r: int) -> NDArray[np.uint64]:
    words = -(-r // 64)
    width = 64 * words
    tail = (generator ^ 1 << r) << (width - r)
    table = np.zeros((256, words), np.uint64)
    for octet in range(256):
        value = octet << (width - 8)
        for _ in range(8):
            top = value >> (width - 1)
            value = (value << 1) & ((1 << width) - 1)
            value ^= tail if top else 0
        table[octet] = [value >> (width - 64 * (w + 1)) & (2**64 - 1) for w in range(words)]
    return table


@dataclass(frozen=True, slots=True, kw_only=True)
class Bch(Step):
    """A systematic binary BCH code: t errors of a codeword are corrected. A frame is one codeword after the other.

    Source: Bose and Ray-Chaudhuri (1960), Hocquenghem (1959).
    """

    name: ClassVar[str] = "bch"
    role = "code"

    n: Annotated[int, Ge(0), Le(16384), Doc("bits of a codeword, overall parity bit included; 0: 2**m - 1")] = 0
    k: Annotated[int, Ge(0), Le(16383), Doc("data bits; 0: as t leaves")] = 0
    m: Annotated[int, Ge(0), Le(14), Doc("of the field GF(2^m), 3 to 14; 0: the least that n fits")] = 0
    t: Annotated[int, Ge(0), Le(4096), Doc("errors to correct; 0: as k allows")] = 0
    poly: Annotated[int, Ge(0), Le(0x7FFF), Doc("field polynomial, highest term written; 0: the usual one")] = 0
    generator: Annotated[int, Ge(0), Doc("generator polynomial, where it is not the narrow-sense BCH code's; "
                                         "bit i for x^i")] = 0
    extended: Annotated[bool, Doc("an overall even parity bit stands behind the codeword")] = False
    complement: Annotated[bool, Doc("check bits are sent inverted")] = False
    filler: Annotated[int, Ge(0), Le(64), Doc("zero bits behind every codeword")] = 0
    correct: Annotated[bool, Doc("false: errors are only found")] = True

    def __post_init__(self) -> None:
        if not (self.n or self.m):
            raise ParameterError("n", found="neither n nor m", expected="n and k, or m and t", fix="set n and k")
        if self.m and self.m < 3:
            raise ParameterError("m", found=str(self.m), expected="3 to 14", fix="set m = 3 or more")
        if not (self.k or self.t or self.generator):
            raise ParameterError("k", found="neither k, t nor generator", expected="one of them", fix="set k or t")
        if self.k and self.n and self.k >= self.n - self.extended:
            raise ParameterError("k", found=str(self.k), expected=f"less than {self.n - self.extended}",
                                 fix="set k to the data bits of a codeword")
        if self.n == 1:
            raise ParameterError("n", found="1", expected="at least 3", fix="set n to the bits of a codeword")
        _ = self._own

    @property
    def _own(self) -> _Code:
        n = max(self.n - self.extended, 0)
        return _code(n, self.k, self.t, self.m, self.poly, self.generator)

    @property
    def errors(self) -> int:
        """Errors that are corrected in a codeword."""
        return self._own.t if self.correct else 0

    @property
    def size(self) -> int:
        """Bits on the air for each codeword."""
        return self._own.n + self.extended + self.filler

    def accepted_share(self) -> float:
        """Return the share of random codewords that the decoder accepts, the filler not counted.

        The code's bits have spheres of radius t round its codewords; with an overall parity bit, or even
        weight throughout, one parity class of them is left.
        """
        own, t = self._own, self.errors
        n = own.n + self.extended
        return sum(comb(n, i) for i in range(t + 1)) / 2.0 ** (n - own.k)

    def strength(self, k: int) -> Strength:
        own, t = self._own, self.errors
        least = 2 * own.t + 1 + (self.extended or own.even)
        does = f"corrects {t} of {own.n + self.extended} bits" if t else "finds errors only"
        return Strength(f"({own.n + self.extended},{own.k}), distance at least {least}, {does}",
                        self.accepted_share() ** (k // own.k))

    def codewords(self, n: int) -> Codewords:
        bit = np.arange(n)
        return Codewords(bit // self.size, bit, self.errors)

    def coded_bits(self, k: int) -> int:
        words, rest = divmod(k, self._own.k)
        if rest or not words:
            raise LengthError(f"{k} data bits are no whole number of words of {self._own.k} bits")
        return words * self.size

    def data_bits(self, n: int) -> int:
        words, rest = divmod(n, self.size)
        if rest or not words:
            raise LengthError(f"{n} bits are no whole number of codewords of {self.size} bits")
        return words * self._own.k

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        n = self.coded_bits(data.shape[1])
        own = self._own
        words = np.ascontiguousarray(data).reshape(len(data) * (n // self.size), own.k)
        out = np.zeros((len(words), self.size), np.uint8)
        out[:, : own.k] = words
        out[:, own.k : own.n] = check_bits(words, own.n - own.k, own.table)
        if self.extended:
            out[:, own.n] = np.bitwise_xor.reduce(out[:, : own.n], axis=1)
        if self.complement:
            out[:, own.k : own.n] ^= 1
        return out.reshape(len(data), n)

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        k = self.data_bits(word.shape[1])
        return self._words(word)[:, : self._own.k].reshape(len(word), k), None

    def _words(self, bits: NDArray[np.uint8]) -> NDArray[np.uint8]:
        """Return frames as rows of one codeword each, filler included."""
        return np.ascontiguousarray(bits).reshape(len(bits) * (bits.shape[1] // self.size), self.size)

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        try:
            k = self.data_bits(batch.bits.shape[1])
        except LengthError:
            return too_short(batch)
        own, frames = self._own, len(batch.bits)
        words = self._words(batch.bits)
        doubt = None if batch.doubt is None else self._words(batch.doubt)
        data = np.empty((len(words), own.k), np.uint8)
        spent, repaired = np.zeros(len(words), np.int32), np.zeros(len(words), np.int32)
        for at in range(0, len(words), PIECE):
            part = slice(at, at + PIECE)
            came = words[part].copy()
            if self.complement:
                came[:, own.k : own.n] ^= 1
            mended = came.copy()
            mended[:, self.size - self.filler :] = 0
            spent[part] = self._correct(mended)
            if doubt is not None:
                self._with_erasures(came, mended, doubt[part] == 255, spent[part])
            repaired[part] = count_differences(mended, came)
            data[part] = mended[:, : own.k]
        by_frame = spent.reshape(frames, k // own.k)
        given_up = (by_frame < 0).any(axis=1)
        reach = 2 * self.errors + self.extended
        out = whole(batch, data.reshape(frames, k), None)
        if doubt is not None:
            kept = np.where((spent < 0)[:, None], doubt[:, : own.k], np.uint8(0))
            out.doubt = kept.reshape(frames, k)
        if reach:
            used = np.where(by_frame < 0, 0, by_frame).max(axis=1)
            out.headroom = (1 - used / (2 * self.errors)).astype(np.float32) if self.errors else None
        out.repaired[:] = repaired.reshape(frames, k // own.k).sum(axis=1)
        out.fault[given_up] = UNCORRECTABLE
        return out

    def _correct(self, words: Bits) -> NDArray[np.int32]:
        """Correct codewords in place; return 2 errors of each, -1 where it could not be repaired."""
        own = self._own
        errors = np.empty(len(words), np.int32)
        before = None if self.correct else words.copy()
        correct(words, own.n, self.extended, own.even, own.octets, own.field.order, own.field.exp, own.field.log,
                errors)
        if before is not None:
            words[:] = before
            errors[errors > 0] = -1
        return np.where(errors < 0, -1, 2 * errors).astype(np.int32)

    def _with_erasures(self, came: Bits, mended: Bits, erased: NDArray[np.bool_], spent: NDArray[np.int32]) -> None:
        """Decode codewords with erased bits again, these bits all 0 and all 1, and keep the better.

        One of the two has at most half of the erased bits wrong, so that 2 errors + erasures up to 2t are
        repaired. Source: Lin and Costello, Error Control Coding, 2nd edition, section 6.8.
        """
        rows = np.flatnonzero(erased.any(axis=1))
        if not len(rows):
            return
        lost, reach = erased[rows], 2 * self.errors + self.extended
        best = np.full(len(rows), reach + 1)
        for filled in (0, 1):
            trial = np.where(lost, np.uint8(filled), came[rows])
            start = trial.copy()
            done = self._correct(trial)
            outside = ((trial != start) & ~lost).sum(axis=1)
            cost = np.where(done < 0, reach + 1, 2 * outside + lost.sum(axis=1))
            better = np.flatnonzero(cost < best)
            mended[rows[better]] = trial[better]
            best = np.minimum(best, cost)
        failed = best > reach
        mended[rows[failed]] = came[rows[failed]]
        spent[rows] = np.where(failed, -1, np.minimum(best, 2 * self.errors))
