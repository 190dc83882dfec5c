"""Reed-Solomon codes over GF(2^m): shortened, interleaved, with errors and erasures, also in a dual basis."""

from dataclasses import dataclass
from functools import lru_cache
from math import comb, gcd
from typing import Annotated, ClassVar, Literal

import numpy as np
from annotated_types import Ge, Le
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.differences import count_differences
from pcaptool.coding.field import Field, field
from pcaptool.coding.reed_solomon_kernel import check_symbols, correct, pack, unpack
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

TRACE_EXPONENT = 117        # of the CCSDS dual basis: bit i of an element u is Tr(u alpha^(117 i))
LARGEST_TABLE = 1 << 20     # bytes of the generator times every symbol
PIECE = 512                 # frames worked on at a time, so that they stay in the cache
NO_ROWS = np.zeros((0, 0), np.uint16)
NOTHING_ERASED = np.zeros((0, 0), np.bool_)


@dataclass(frozen=True, slots=True, eq=False)
class _Tables:
    field: Field
    generator: NDArray[np.uint16]   # (r + 1,) highest term first
    g_log: NDArray[np.int32]        # (r,) logarithms behind the leading 1
    rows: NDArray[np.uint16]        # (2^m, r) or no rows
    sent: NDArray[np.uint16]        # (2^m,) symbol on the air of every field element
    element: NDArray[np.uint16]     # (2^m,) the inverse


@lru_cache(maxsize=32)
def _tables(m: int, poly: int, r: int, first_root: int, root_step: int, dual: bool) -> _Tables:
    f = field(m, poly)
    generator = [1]
    for j in range(r):                              # times (x - root)
        root = f.power((first_root + j) * root_step)
        generator = [a ^ f.multiply(b, root) for a, b in zip([*generator, 0], [0, *generator], strict=True)]
    g = np.array(generator, np.uint16)
    g_log = f.log[g[1:]]
    rows = NO_ROWS
    if 2 * r << m <= LARGEST_TABLE:
        rows = np.zeros((1 << m, r), np.uint16)
        there = g_log >= 0
        for value in range(1, 1 << m):
            rows[value, there] = f.exp[g_log[there] + f.log[value]]
    sent = _dual_basis(f) if dual else np.arange(1 << m, dtype=np.uint16)
    return _Tables(f, g, g_log, rows, sent, np.argsort(sent).astype(np.uint16))


def _dual_basis(f: Field) -> NDArray[np.uint16]:
    """Return the symbol sent for every element: z_i = Tr(u alpha^(117 i)), z_0 most significant.

    Source: CCSDS 131.0-B, annex on the transformation between conventional and dual basis.
    """
    unit = []                                       # sent symbol of alpha^b
    for b in range(f.m):
        bits = 0
        for i in range(f.m):
            power = f.power(b + TRACE_EXPONENT * i)
            trace, x = 0, power
            for _ in range(f.m):                    # Tr(x) = x + x^2 + x^4 ...
                trace ^= x
                x = f.multiply(x, x)
            bits = bits << 1 | trace
        unit.append(bits)
    sent = np.zeros(1 << f.m, np.uint16)
    for b, bits in enumerate(unit):
        sent[1 << b : 2 << b] = sent[: 1 << b] ^ bits
    return sent


@dataclass(frozen=True, slots=True, kw_only=True)
class ReedSolomon(Step):
    """A systematic Reed-Solomon code: (n - k) / 2 wrong symbols of a codeword are corrected, or n - k erased ones.

    Source: Reed and Solomon (1960); decoding by Berlekamp-Massey, Chien and Forney; interleaving and
    virtual fill as in CCSDS 131.0-B, clause 4.
    """

    name: ClassVar[str] = "reed_solomon"
    role = "code"

    n: Annotated[int, Ge(3), Le(65535), Doc("symbols of a full codeword, fill included")]
    k: Annotated[int, Ge(1), Le(65534), Doc("data symbols of it")]
    m: Annotated[int, Ge(3), Le(16), Doc("bits of a symbol")] = 8
    poly: Annotated[int, Ge(0), Le(0x1FFFF), Doc("field polynomial, highest term written; 0: the usual one")] = 0
    first_root: Annotated[int, Ge(0), Le(65535), Doc("exponent of the generator's first root, before root_step")] = 0
    root_step: Annotated[int, Ge(1), Le(65535), Doc("roots are alpha^(root_step (first_root + i))")] = 1
    basis: Annotated[Literal["polynomial", "dual"],
                     Doc("what the bits of a symbol stand for; dual: as in CCSDS 131.0-B, m = 8 only")] = "polynomial"
    depth: Annotated[int, Ge(1), Le(255),
                     Doc("codewords interleaved symbol by symbol: symbol j belongs to codeword j mod depth")] = 1
    fill: Annotated[int, Ge(0), Le(65533), Doc("zero symbols in front of every codeword that are not sent")] = 0
    shorten: Annotated[bool, Doc("also take shorter frames: the fill follows from the length")] = False

    def __post_init__(self) -> None:
        order = (1 << self.m) - 1
        if self.n > order:
            raise ParameterError("n", found=str(self.n), expected=f"at most 2**{self.m} - 1 = {order}",
                                 fix=f"set n = {order} or less, or a larger m")
        if self.k >= self.n:
            raise ParameterError("k", found=str(self.k), expected=f"less than n = {self.n}",
                                 fix="set n - k to the number of check symbols")
        if self.fill >= self.k:
            raise ParameterError("fill", found=str(self.fill), expected=f"less than k = {self.k}",
                                 fix="n and k are those of the full codeword; fill counts the symbols not sent")
        common = gcd(self.root_step, order)
        if common != 1:
            raise ParameterError("root_step", found=f"{self.root_step}, which has the factor {common} in common with "
                                 f"2**{self.m} - 1 = {order}", expected="no common factor, so that no two "
                                 "positions look alike", fix="set root_step = 1, or as your standard says")
        if self.basis == "dual" and self.m != 8:
            raise ParameterError("basis", found=f"dual with m = {self.m}", expected="m = 8, for which it is defined",
                                 fix='set basis = "polynomial"')
        field(self.m, self.poly)

    @property
    def t(self) -> int:
        """Wrong symbols that are corrected in a codeword."""
        return (self.n - self.k) // 2

    def accepted_share(self) -> float:
        """Return the share of random codewords (as sent, without fill) that the decoder accepts."""
        n, q = self.n - self.fill, 1 << self.m
        volume: int = sum(comb(n, i) * (q - 1) ** i for i in range(self.t + 1))
        return float(volume / q ** (self.n - self.k))

    def strength(self, k: int) -> Strength:
        data = self._sent_data(k, 0)
        n, q, r = data + self.n - self.k, 1 << self.m, self.n - self.k
        volume: int = sum(comb(n, i) * (q - 1) ** i for i in range(self.t + 1))
        spread = f", {self.depth} interleaved" if self.depth > 1 else ""
        return Strength(f"({n},{data}) over GF({q}){spread}, distance {r + 1}, corrects {self.t} of {n} symbols of "
                        f"{self.m} bits", float(volume / q**r) ** self.depth)

    def codewords(self, n: int) -> Codewords:
        symbol = np.arange(n) // self.m
        return Codewords(symbol % self.depth, symbol, self.t)

    @property
    def _own(self) -> _Tables:
        return _tables(self.m, self.poly, self.n - self.k, self.first_root, self.root_step, self.basis == "dual")

    def _sent_data(self, bits: int, check: int) -> int:
        """Return the data symbols of each codeword in a frame with ``check`` check symbols in each."""
        count, rest = divmod(bits, self.m * self.depth)
        data = count - check
        if rest or data < 1 or data > self.k - self.fill or (data != self.k - self.fill and not self.shorten):
            full = (self.k - self.fill + check) * self.depth
            raise LengthError(
                f"{bits} bits are not {'at most ' if self.shorten else ''}{full} symbols of {self.m} bits"
                + (f" in whole rounds of {self.depth}" if self.depth > 1 else ""))
        return data

    def coded_bits(self, k: int) -> int:
        return (self._sent_data(k, 0) + self.n - self.k) * self.depth * self.m

    def data_bits(self, n: int) -> int:
        return self._sent_data(n, self.n - self.k) * self.depth * self.m

    def encode(self, data: Bits, context: Context = NO_CONTEXT, side: Bits | None = None) -> Bits:
        n = self.coded_bits(data.shape[1])
        own = self._own
        out = np.empty((len(data), n), np.uint8)
        out[:, : data.shape[1]] = data
        for at in range(0, len(data), PIECE):
            symbols = self._symbols(data[at : at + PIECE])
            check = check_symbols(symbols, self.depth, own.g_log, own.rows, own.field.exp, own.field.log)
            out[at : at + PIECE, data.shape[1] :] = unpack(own.sent[check], self.m)
        return out

    def _symbols(self, bits: Bits) -> NDArray[np.uint16]:
        """Return field elements: uint16 (frame, symbol)."""
        symbols = np.packbits(bits, axis=1).astype(np.uint16) if self.m == 8 else pack(
            np.ascontiguousarray(bits), self.m)
        return symbols if self.basis == "polynomial" else self._own.element[symbols]

    def strip(self, word: Bits, context: Context = NO_CONTEXT) -> tuple[Bits, Bits | None]:
        return word[:, : self.data_bits(word.shape[1])], None

    def decode(self, batch: Batch, context: Context = NO_CONTEXT) -> Decoded:
        try:
            k = self.data_bits(batch.bits.shape[1])
        except LengthError:
            return too_short(batch)
        own, bits, frames = self._own, np.ascontiguousarray(batch.bits), len(batch.bits)
        data = np.empty((frames, k), np.uint8)
        spent, given_up = np.zeros(frames, np.int32), np.zeros(frames, np.bool_)
        repaired = np.zeros(frames, np.int32)
        for at in range(0, frames, PIECE):
            part = slice(at, at + PIECE)
            came = bits[part]
            word = self._symbols(came)
            erased = NOTHING_ERASED
            if batch.doubt is not None:
                lost = (batch.doubt[part] == 255).reshape(len(came), -1, self.m).any(axis=2)
                erased = lost if lost.any() else erased
            before = word.copy()
            correct(word, erased, self.depth, self.first_root, self.root_step, own.field.order, own.g_log, own.rows,
                    own.field.exp, own.field.log, spent[part], given_up[part])
            data[part] = came[:, :k]
            changed = np.flatnonzero((word != before).any(axis=1))
            if len(changed):
                mended = unpack(own.sent[word[changed]], self.m)
                repaired[part][changed] = count_differences(mended, came[changed])
                data[at + changed] = mended[:, :k]
        out = whole(batch, data, None if batch.doubt is None else self._doubt(batch.doubt[:, :k], given_up),
                    headroom=(1 - spent / (self.n - self.k)).astype(np.float32))
        out.repaired[:] = repaired
        out.fault[given_up] = UNCORRECTABLE
        return out

    def _doubt(self, doubt: NDArray[np.uint8], given_up: NDArray[np.bool_]) -> NDArray[np.uint8]:
        """Return the doubt about the data: none where the code has settled it."""
        return np.where(given_up[:, None], doubt, np.uint8(0))
