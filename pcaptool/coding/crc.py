"""Cyclic redundancy checks of any width from 1 to 64 bits."""

from dataclasses import dataclass
from difflib import get_close_matches
from functools import lru_cache
from typing import Annotated, ClassVar, Literal

import numpy as np
from annotated_types import Ge, Le
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.bits import bits_from_numbers
from pcaptool.coding.blocks import BlockCheck
from pcaptool.coding.crc_kernel import run, tables, to_register
from pcaptool.coding.crc_standards import STANDARDS, CrcCode
from pcaptool.coding.crc_strength import crc_strength
from pcaptool.coding.field import polynomial_text
from pcaptool.coding.step import Bits, LengthError, ParameterError
from pcaptool.coding.strength import Strength

__all__ = ["STANDARDS", "Crc", "CrcCode", "crc", "crc_bit_by_bit", "crc_of_bits"]


@lru_cache(maxsize=64)
def _compiled(code: CrcCode) -> tuple[NDArray[np.uint64], np.uint64]:
    init = to_register(code.init, code.width, code.refin)
    return tables(code.width, code.poly, code.refin), np.uint64(init)


def _finish(register: NDArray[np.uint64], code: CrcCode) -> NDArray[np.uint64]:
    """Turn kernel registers into CRC values, in place: final reflection and XOR."""
    if not code.refin:
        register.byteswap(inplace=True)
        register >>= np.uint64(64 - code.width)
    value = _reflected(register, code.width) if code.refin != code.refout else register
    value ^= np.uint64(code.xorout)
    return value


def _reflected(value: NDArray[np.uint64], width: int) -> NDArray[np.uint64]:
    out = np.zeros_like(value)
    for j in range(width):
        out |= ((value >> np.uint64(j)) & np.uint64(1)) << np.uint64(width - 1 - j)
    return out


def crc(data: NDArray[np.uint8], n_bytes: NDArray[np.int64], code: CrcCode) -> NDArray[np.uint64]:
    """Return the CRC of every frame.

    data      uint8  (frame, byte)  in the order sent; columns from n_bytes on are padding
    n_bytes   int64  (frame,)       bytes covered, check bytes excluded
    returns   uint64 (frame,)       right-aligned
    Parameters as in Williams, "A painless guide to CRC error detection algorithms" (1993).
    """
    t, init = _compiled(code)
    return _finish(run(np.ascontiguousarray(data), n_bytes, t, init), code)


def crc_bit_by_bit(data: bytes, code: CrcCode) -> int:
    """Return the CRC of some bytes: the plain shift register, one bit at a time (Williams, 1993)."""
    register, top, mask = code.init, 1 << (code.width - 1), (1 << code.width) - 1
    for byte in data:
        for k in range(8):
            bit = byte >> (k if code.refin else 7 - k) & 1
            out = bool(register & top) ^ bool(bit)
            register = register << 1 & mask
            if out:
                register ^= code.poly
    if code.refout:
        register = int(format(register, f"0{code.width}b")[::-1], 2)
    return register ^ code.xorout


def crc_of_bits(bits: Bits, code: CrcCode) -> NDArray[np.uint64]:
    """Return the CRC of frames of bits in the order sent, octets most significant bit first.

    bits  uint8 (frame, bit); bits behind the last whole octet enter one by one
    Raises LengthError for such bits where the code is reflected: it orders bits within octets.
    """
    n, width = bits.shape
    octets = width // 8
    if width % 8 and code.refin:
        raise LengthError(f"a reflected CRC of {width} bits, which are no whole octets")
    t, init = _compiled(code)
    register = run(np.packbits(bits[:, : octets * 8], axis=1), np.full(n, octets, np.int64), t, init)
    if width % 8:
        value = register.byteswap()            # left-aligned, most significant term first
        generator = np.uint64(code.poly << (64 - code.width))
        for j in range(octets * 8, width):
            out = (value >> np.uint64(63)) ^ bits[:, j]
            value = (value << np.uint64(1)) ^ (generator * out)
        register = value.byteswap()
    return _finish(register, code)


@dataclass(frozen=True, slots=True, kw_only=True)
class Crc(BlockCheck):
    """A CRC behind (or before) the data it covers."""

    name: ClassVar[str] = "crc"
    standard: Annotated[str, Doc("name of a published parameter set, instead of the numbers")] = ""
    width: Annotated[int, Ge(0), Le(64), Doc("check bits, 1 to 64")] = 0
    poly: Annotated[int, Ge(0), Doc("generator without its top term, unreflected")] = 0
    init: Annotated[int, Ge(0), Doc("register preset, unreflected")] = 0
    refin: Annotated[bool, Doc("octets enter least significant bit first")] = False
    refout: Annotated[bool, Doc("the final register is reversed")] = False
    xorout: Annotated[int, Ge(0), Doc("applied to the register at the end")] = 0
    order: Annotated[Literal["big", "little", ""],
                     Doc("order of the check octets, of the check bits where the width is no multiple of 8; "
                         "default little for a reflected code, else big")] = ""

    def __post_init__(self) -> None:
        BlockCheck.__post_init__(self)
        if self.standard:
            if self.standard not in STANDARDS:
                near = get_close_matches(self.standard, STANDARDS, n=1)
                fix = f'did you mean "{near[0]}"?' if near else "give width, poly, init and so on"
                raise ParameterError(
                    "standard", found=repr(self.standard), expected="one of " + ", ".join(STANDARDS),
                    fix=fix)
            if self.width or self.poly or self.init or self.xorout or self.refin or self.refout:
                raise ParameterError("standard", found="standard and numbers", expected="one of them",
                                     fix="leave out width, poly, init, refin, refout and xorout")
            return
        if not self.width:
            raise ParameterError("width", found="no width", expected="a standard, or width and poly",
                                 fix='set standard = "..." or width and poly')
        for key in ("poly", "init", "xorout"):
            value = getattr(self, key)
            if value >> self.width:
                raise ParameterError(key, found=hex(value), expected=f"at most {self.width} bits",
                                     fix="drop the top term of the polynomial, or set a larger width")
        if not self.poly:
            raise ParameterError("poly", found="0", expected="a polynomial",
                                 fix="write it unreflected, top term dropped: 0x07 for x^8 + x^2 + x + 1")

    @property
    def code(self) -> CrcCode:
        if self.standard:
            return STANDARDS[self.standard]
        return CrcCode(self.width, self.poly, self.init, self.refin, self.refout, self.xorout)

    @property
    def check_bits(self) -> int:
        return self.code.width

    @property
    def octets(self) -> bool:
        return self.code.refin

    def strength(self, k: int) -> Strength:
        code, plain = self.code, BlockCheck.strength(self, k)
        longest = max((end - begin - self.skip for begin, end in self._blocks(k)), default=0)
        covered = max(min(longest, self.cover) if self.cover else longest, 0)
        s = crc_strength(1 << code.width | code.poly, covered + code.width)
        of = " ".join(f"({polynomial_text(f)})" + (f"^{t}" if t > 1 else "") for f, t in s.factors)
        finds = f"bursts up to {s.burst} bits" + (", odd numbers of wrong bits" if s.odd else "")
        text = (f"{plain.text}; generator {of}, order {s.order}; finds {finds}; distance "
                f"{'' if s.exact else 'at least '}{s.distance} at {s.bits} bits")
        warning = ""
        if s.effective < s.width:
            warning = (f"the generator lacks its +1 term and is a CRC of {s.effective} bits; a register that shifts "
                       "right, XORed with the constant as printed, does that: check the bit order")
        elif s.exact and s.distance == 2:
            warning = f"two wrong bits {s.order} apart are missed: the word of {s.bits} bits is too long for it"
        return Strength(text, plain.accepted, plain.exact, warning)

    def compute(self, data: Bits) -> Bits:
        code = self.code
        value = crc_of_bits(data, code)
        if (self.order or ("little" if code.refout else "big")) == "little":
            value = _octets_reversed(value, code.width)
        return bits_from_numbers(value, code.width)


def _octets_reversed(value: NDArray[np.uint64], width: int) -> NDArray[np.uint64]:
    return _reflected(value, width) if width % 8 else value.byteswap() >> np.uint64(64 - width)
