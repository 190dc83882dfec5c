"""Published check values: each entry of published.json names its source."""

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from pcaptool.coding.crc import CrcCode

ENTRIES: dict[str, list[dict[str, Any]]] = json.loads(
    Path(__file__).with_name("published.json").read_text(encoding="utf-8"))


def entries(kind: str) -> list[Any]:
    """Return the entries of a kind as test parameters, named by title."""
    return [pytest.param(entry, id=entry["title"]) for entry in ENTRIES[kind]]


def crc_code(params: dict[str, Any]) -> CrcCode:
    return CrcCode(params["width"], int(params["poly"], 16), int(params["init"], 16), params["refin"],
                   params["refout"], int(params["xorout"], 16))


def bits(text: str) -> NDArray[np.uint8]:
    """Return one row of bits written as 0 and 1."""
    return np.array([[int(c) for c in text]], np.uint8)


def hex_bits(text: str) -> NDArray[np.uint8]:
    """Return one row of bits of hex octets, most significant first."""
    return np.unpackbits(np.frombuffer(bytes.fromhex(text), np.uint8))[None]


def text(row: NDArray[np.uint8]) -> str:
    return "".join(str(int(b)) for b in row)


def cyclic_generator(code: dict[str, Any]) -> tuple[str, ...]:
    """Return the rows of the systematic generator of a cyclic (shortened, extended) code.

    Row i is the data word x^(k-1-i) followed by the remainder of x^(n-1-i) by g: division by hand.
    """
    n, k, g = code["n"], code["k"], int(code["g"], 16)
    extended = code["extend"] == "even"
    r = n - k - extended
    rows = []
    for i in range(k):
        remainder = 1 << (k - 1 - i + r)
        for shift in range(k - 1, -1, -1):
            if remainder >> (shift + r) & 1:
                remainder ^= g << shift
        row = format(1 << (k - 1 - i), f"0{k}b") + format(remainder, f"0{r}b")
        rows.append(row + str(row.count("1") % 2) if extended else row)
    return tuple(rows)
