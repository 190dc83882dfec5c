"""The binary Golay codes."""

from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, ClassVar, Literal

import numpy as np
from typing_extensions import Doc

from pcaptool.coding.block_step import BlockStep
from pcaptool.coding.cyclic import cyclic_generator
from pcaptool.coding.linear import LinearCode, linear_code

POLYNOMIALS = {"C75": 0xC75, "AE3": 0xAE3}      # each the other's mirror


@lru_cache(maxsize=4)
def _code(n: int, generator: str) -> LinearCode:
    rows = cyclic_generator(POLYNOMIALS[generator], 23, 12)
    if n == 24:
        rows = np.concatenate([rows, rows.sum(axis=1, dtype=np.uint8)[:, None] & 1], axis=1)
    return linear_code(rows, 3, 7 if n == 23 else 8)


@dataclass(frozen=True, slots=True, kw_only=True)
class Golay(BlockStep):
    """The perfect (23,12) code, or (24,12) with an overall parity bit: three errors are corrected.

    Source: Golay (1949), Proc. IRE 37:657.
    """

    name: ClassVar[str] = "golay"

    n: Annotated[Literal[23, 24], Doc("bits of a codeword; 24: an overall parity bit stands behind")] = 24
    generator: Annotated[Literal["C75", "AE3"],
                         Doc("generator polynomial in hex: x^11 + x^10 + x^6 + x^5 + x^4 + x^2 + 1, "
                             "or its mirror")] = "C75"

    @property
    def code(self) -> LinearCode:
        return _code(self.n, self.generator)
