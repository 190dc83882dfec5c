"""Any binary linear block code, given by its generator or parity-check matrix."""

from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, ClassVar

import numpy as np
from annotated_types import Ge, Le
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.block_step import BlockStep
from pcaptool.coding.linear import LinearCode, generator_of, linear_code
from pcaptool.coding.step import ParameterError

Row = int | str


def _bits(row: Row, n: int) -> str:
    if isinstance(row, str):
        return row.replace(" ", "").replace("_", "")
    return format(row, f"0{n}b")


@lru_cache(maxsize=64)
def _code(generator: tuple[Row, ...], parity: tuple[Row, ...], n: int, t: int | None) -> LinearCode:
    rows = [_bits(row, n) for row in generator or parity]
    matrix: NDArray[np.uint8] = np.array([[int(c) for c in row] for row in rows], np.uint8)
    return linear_code(matrix if generator else generator_of(matrix), t)


@dataclass(frozen=True, slots=True, kw_only=True)
class BlockCode(BlockStep):
    """A linear block code with bounded-distance decoding by syndrome table."""

    name: ClassVar[str] = "block_code"

    generator: Annotated[tuple[Row, ...],
                         Doc("rows of the generator matrix: strings of 0 and 1, or numbers with n set")] = ()
    parity: Annotated[tuple[Row, ...],
                      Doc("rows of the parity-check matrix, instead; check bits are taken from the right, "
                          "so that for [P | I] the data bits stand in front")] = ()
    n: Annotated[int, Ge(0), Le(1024), Doc("bits of a codeword, where rows are numbers")] = 0
    t: Annotated[int | None, Ge(0),
                 Doc("errors to correct per codeword; default all that the distance allows")] = None

    def __post_init__(self) -> None:
        key = "generator" if self.generator else "parity"
        rows = self.generator or self.parity
        if bool(self.generator) == bool(self.parity):
            raise ParameterError("generator", found="both matrices" if rows else "no matrix",
                                 expected="generator or parity", fix="give one of them")
        if not self.n and any(isinstance(row, int) for row in rows):
            raise ParameterError("n", found="no n", expected="n, since rows are numbers",
                                 fix="set n to the bits of a codeword, or write rows as strings")
        texts = [_bits(row, self.n) for row in rows]
        n = self.n or len(texts[0])
        if not 0 < n <= 1024 or any(set(text) - {"0", "1"} or len(text) != n for text in texts):
            raise ParameterError(key, found="rows of different length or other characters",
                                 expected=f"rows of {n} bits", fix="check every row")
        try:
            _code(self.generator, self.parity, self.n, self.t)
        except ParameterError as error:
            raise ParameterError(error.key if error.key != "generator" else key, found=error.found,
                                 expected=error.expected, fix=error.fix) from None

    @property
    def code(self) -> LinearCode:
        return _code(self.generator, self.parity, self.n, self.t)
