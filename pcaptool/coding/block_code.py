"""Any binary linear block code, given by its generator or parity matrix."""

from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, ClassVar

import numpy as np
from annotated_types import Ge
from numpy.typing import NDArray
from typing_extensions import Doc

from pcaptool.coding.block_step import BlockStep
from pcaptool.coding.linear import LinearCode, linear_code, parity_check
from pcaptool.coding.step import ParameterError


@lru_cache(maxsize=64)
def _code(generator: tuple[str, ...], parity: tuple[str, ...], t: int | None) -> LinearCode:
    matrix = _matrix(generator or parity)
    if not generator:
        matrix = parity_check(matrix)       # the dual's parity check generates the code
    return linear_code(matrix, t)


def _matrix(rows: tuple[str, ...]) -> NDArray[np.uint8]:
    return np.array([[int(c) for c in row.replace(" ", "")] for row in rows], np.uint8)


@dataclass(frozen=True, slots=True, kw_only=True)
class BlockCode(BlockStep):
    """A linear block code with bounded-distance decoding by syndrome table."""

    name: ClassVar[str] = "block_code"

    generator: Annotated[tuple[str, ...], Doc("rows of the generator matrix, strings of 0 and 1")] = ()
    parity: Annotated[tuple[str, ...], Doc("rows of the parity-check matrix, instead")] = ()
    t: Annotated[int | None, Ge(0), Doc("errors to correct per codeword; default all the distance allows")] = None

    def __post_init__(self) -> None:
        key = "generator" if self.generator else "parity"
        rows = self.generator or self.parity
        if bool(self.generator) == bool(self.parity):
            raise ParameterError("generator", found="both matrices" if rows else "no matrix",
                                 expected="generator or parity", fix="give one of them")
        texts = [row.replace(" ", "") for row in rows]
        if any(set(row) - {"0", "1"} or len(row) != len(texts[0]) for row in texts) or not texts[0]:
            raise ParameterError(key, found="rows of different length or other characters",
                                 expected="rows of 0 and 1, all of one length", fix="check every row")
        try:
            _code(self.generator, self.parity, self.t)
        except ValueError as error:
            raise ParameterError(key, found=str(error), expected="a code that can be decoded by table",
                                 fix="check the rows, or set a lower t") from None

    @property
    def code(self) -> LinearCode:
        return _code(self.generator, self.parity, self.t)
