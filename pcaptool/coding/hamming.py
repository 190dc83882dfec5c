"""Hamming codes, shortened and extended."""

from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, ClassVar, Literal

import numpy as np
from annotated_types import Ge, Le
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.block_step import BlockStep
from pcaptool.coding.linear import LinearCode, linear_code
from pcaptool.coding.step import ParameterError


def check_bits_for(k: int) -> int:
    """Return the least r with 2**r >= k + r + 1."""
    r = 2
    while 2**r < k + r + 1:
        r += 1
    return r


def hamming_generator(k: int, r: int, positional: bool) -> NDArray[np.uint8]:
    """Return the generator (k, k + r) of a Hamming code, shortened where k < 2**r - r - 1.

    positional  check bits stand at positions 1, 2, 4 ... (counted from 1), each the parity of the
                positions whose number contains it; otherwise data first, then the same check bits
    Source: Hamming (1950), Bell Syst. Tech. J. 29:147-160.
    """
    places = [p for p in range(1, 2**r) if p & (p - 1)][:k]     # positions that are no power of two
    generator = np.zeros((k, k + r), np.uint8)
    for b, place in enumerate(places):
        generator[b, place - 1 if positional else b] = 1
        for j in range(r):
            if place >> j & 1:
                generator[b, (1 << j) - 1 if positional else k + j] = 1
    return generator


@lru_cache(maxsize=64)
def _code(n: int, k: int, extended: bool, positional: bool) -> LinearCode:
    generator = hamming_generator(k, n - k - extended, positional)
    if extended:
        parity = generator.sum(axis=1, dtype=np.uint8)[:, None] & 1
        generator = np.concatenate([generator, parity], axis=1)
    return linear_code(generator, 1, 4 if extended else 3)


@dataclass(frozen=True, slots=True, kw_only=True)
class Hamming(BlockStep):
    """A Hamming code: one error per codeword is corrected; extended, two are found."""

    name: ClassVar[str] = "hamming"

    n: Annotated[int, Ge(3), Le(512), Doc("bits of a codeword, the overall parity bit included")]
    k: Annotated[int, Ge(1), Le(501), Doc("data bits of a codeword")]
    extended: Annotated[bool, Doc("an overall parity bit stands behind the codeword")] = False
    layout: Annotated[Literal["positional", "systematic"],
                      Doc("positional: check bits at positions 1, 2, 4 ...; systematic: behind the data, "
                          "that of position 1 first")] = "positional"

    def __post_init__(self) -> None:
        need = check_bits_for(self.k)
        right = self.k + need + self.extended
        if self.n == right:
            return
        also = " and 1 overall parity bit" if self.extended else ""
        fitting = (k for k in range(1, self.n) if k + check_bits_for(k) + self.extended == self.n)
        best = next(fitting, 0)
        if best:
            r = check_bits_for(best)
            raise ParameterError(
                "k", found=str(self.k),
                expected=f"{best} (n = {self.n} needs {r} check bits{also}, since 2**{r} >= {best + r} + 1)",
                fix=f"set k = {best}, or n = {right}")
        other = "" if self.extended or self.n != right + 1 else ", or extended = true"
        raise ParameterError(
            "n", found=str(self.n),
            expected=f"{right} (k = {self.k} needs {need} check bits{also}, "
                     f"since 2**{need} >= {self.k + need} + 1)",
            fix=f"set n = {right}{other}")

    @property
    def code(self) -> LinearCode:
        return _code(self.n, self.k, self.extended, self.layout == "positional")
