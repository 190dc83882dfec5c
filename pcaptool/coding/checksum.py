"""Arithmetic checks: Internet checksum, Fletcher, Adler-32, sums, longitudinal XOR, parity."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Annotated, ClassVar, Literal

import numpy as np
from annotated_types import Ge
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.bits import bits_from_numbers
from pcaptool.coding.blocks import BlockCheck
from pcaptool.coding.step import Bits, LengthError, ParameterError

Kind = Literal["internet", "fletcher8", "fletcher16", "fletcher32", "iso-fletcher", "adler32", "sum8",
               "sum16", "negative-sum8", "xor8", "even-parity", "odd-parity"]
BITS = {"internet": 16, "fletcher8": 8, "fletcher16": 16, "fletcher32": 32, "iso-fletcher": 16, "adler32": 32,
        "sum8": 8, "sum16": 16, "negative-sum8": 8, "xor8": 8, "even-parity": 1, "odd-parity": 1}


def _octets(data: Bits) -> NDArray[np.int64]:
    return np.packbits(data, axis=1).astype(np.int64)


def _words(octets: NDArray[np.int64], little: bool) -> NDArray[np.int64]:
    """Return 16-bit words, an odd last octet padded with zero: int64 (frame, word)."""
    if octets.shape[1] % 2:
        octets = np.concatenate([octets, np.zeros((len(octets), 1), np.int64)], axis=1)
    high, low = (octets[:, 1::2], octets[:, 0::2]) if little else (octets[:, 0::2], octets[:, 1::2])
    return high << 8 | low


def internet(octets: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return the complement of the one's-complement sum of 16-bit words. Source: RFC 1071."""
    total: NDArray[np.int64] = _words(octets, little=False).sum(axis=1)
    while (total >> 16).any():
        total = (total & 0xFFFF) + (total >> 16)
    return ~total & 0xFFFF


def fletcher(words: NDArray[np.int64], modulus: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return (first sum, sum of the sums) modulo 15, 255 or 65535. Source: Fletcher (1982); RFC 1146."""
    n = words.shape[1]
    return words.sum(axis=1) % modulus, (words * np.arange(n, 0, -1)).sum(axis=1) % modulus


def iso_fletcher(octets: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return the two octets that, appended, make both sums zero modulo 255; 0 is written as 255.

    Source: ECSS-E-70-41A, annex A.2 (ISO 8473 arithmetic).
    """
    c0, c1 = fletcher(octets, 255)
    first: NDArray[np.int64] = -(c0 + c1) % 255
    first = np.where(first == 0, 255, first)
    second = np.where(c1 == 0, 255, c1)
    return first << 8 | second


def adler32(octets: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return Adler-32. Source: RFC 1950, section 9."""
    n = octets.shape[1]
    a: NDArray[np.int64] = (1 + octets.sum(axis=1)) % 65521
    b: NDArray[np.int64] = (n + (octets * np.arange(n, 0, -1)).sum(axis=1)) % 65521
    return b << 16 | a


def _value(kind: Kind, octets: NDArray[np.int64], little: bool) -> NDArray[np.int64]:
    value: NDArray[np.int64]
    match kind:
        case "internet":
            return internet(octets)
        case "fletcher8":
            nibbles = np.stack([octets >> 4, octets & 15], axis=2).reshape(len(octets), -1)
            first, second = fletcher(nibbles, 15)
            return second << 4 | first
        case "fletcher16":
            first, second = fletcher(octets, 255)
            return second << 8 | first
        case "fletcher32":
            first, second = fletcher(_words(octets, little), 65535)
            return second << 16 | first
        case "iso-fletcher":
            return iso_fletcher(octets)
        case "adler32":
            return adler32(octets)
        case "sum8":
            value = octets.sum(axis=1) & 0xFF
        case "sum16":
            value = _words(octets, little).sum(axis=1) & 0xFFFF
        case "negative-sum8":
            value = -octets.sum(axis=1) & 0xFF
        case _:
            value = np.bitwise_xor.reduce(octets, axis=1, initial=0)
    return value


@dataclass(frozen=True, slots=True, kw_only=True)
class Checksum(BlockCheck):
    """An arithmetic check behind (or before) the data it covers."""

    name: ClassVar[str] = "checksum"

    kind: Annotated[Kind, Doc("which arithmetic")]
    order: Annotated[Literal["big", "little"], Doc("order of the check octets")] = "big"
    words: Annotated[Literal["big", "little"],
                     Doc("octet order of the 16-bit words of fletcher32 and sum16")] = "big"
    every_bits: Annotated[int, Ge(0),
                          Doc("parity kinds: one parity bit per so many data bits; 0: one in all")] = 0

    def __post_init__(self) -> None:
        BlockCheck.__post_init__(self)
        if not self.every_bits:
            return
        if self.check_bits != 1:
            raise ParameterError("every_bits", found=f"every_bits with {self.kind}", expected="a parity kind",
                                 fix="set every, in octets, or a parity kind")
        if self.every or self.skip or self.cover:
            raise ParameterError("every_bits", found="every_bits with every, skip or cover",
                                 expected="every_bits alone", fix="leave the others out")

    @property
    def linear(self) -> bool:
        return self.kind in ("xor8", "even-parity", "odd-parity")

    @property
    def octets(self) -> bool:
        return self.check_bits != 1

    @property
    def check_bits(self) -> int:
        return BITS[self.kind]

    def _blocks(self, k: int) -> Iterator[tuple[int, int]]:
        if not self.every_bits:
            yield from BlockCheck._blocks(self, k)
            return
        for begin in range(0, k, self.every_bits):
            yield begin, min(begin + self.every_bits, k)

    def data_bits(self, n: int) -> int:
        if not self.every_bits:
            return BlockCheck.data_bits(self, n)
        k = n - -(-n // (self.every_bits + 1))
        if self.coded_bits(k) != n:
            raise LengthError(f"{self.name} makes no word of {n} bits")
        return k

    def compute(self, data: Bits) -> Bits:
        if self.check_bits == 1:
            parity: Bits = (data.sum(axis=1, dtype=np.uint8) & 1) ^ np.uint8(self.kind == "odd-parity")
            return parity[:, None]
        number = _value(self.kind, _octets(data), self.words == "little").astype(np.uint64)
        if self.order == "little":
            number = number.byteswap() >> np.uint64(64 - self.check_bits)
        return bits_from_numbers(number, self.check_bits)
