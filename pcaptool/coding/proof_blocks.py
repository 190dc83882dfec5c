"""Outputs of a frame arranged in blocks of look-up tables.

A block gives up to 256 outputs that depend on the same bytes of the frame: for each of these bytes
one or two look-ups, whose entries hold all outputs of the block side by side. So the cost of a block
is the number of bytes it depends on, not much less for 1 output than for 256, and outputs are put
together by the bytes they depend on: the check bits of one codeword in a block, those of the next
in another, those of a check over the whole frame in a third.
"""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.proof_kernel import AT_ONCE, LANES
from pcaptool.coding.proof_probe import Functionals

# Measured costs, in units of one byte of a wide block
NARROW_COST = 0.65          # of a byte of a narrow block
BLOCK_COST = 6.0            # of a block, beside its bytes
FEW = 16                    # outputs of a narrow block: residual only
MANY = 64 * LANES           # outputs of a wide block


@dataclass(frozen=True, slots=True)
class Tables:
    """Blocks ready to be looked up; fields as ``prove`` takes them."""

    positions: NDArray[np.uint64]
    tables: NDArray[np.uint64]
    extent: NDArray[np.int64]
    constant: NDArray[np.uint64]
    word: NDArray[np.int64]

    @property
    def nbytes(self) -> int:
        return self.positions.nbytes + self.tables.nbytes + self.extent.nbytes + self.constant.nbytes + self.word.nbytes


@dataclass(slots=True)
class _Block:
    """What a block gives: residual outputs, then whole words of data."""

    support: NDArray[np.bool_]                  # bytes of the frame that it depends on
    residual: NDArray[np.int64]
    words: list[int] = field(default_factory=list)

    @property
    def lanes(self) -> int:
        return -(-len(self.residual) // 64) + len(self.words)

    @property
    def wide(self) -> bool:
        return len(self.residual) > FEW or bool(self.words)

    @property
    def cost(self) -> float:
        return BLOCK_COST + float(self.support.sum()) * (1.0 if self.wide else NARROW_COST)


def _union(support: NDArray[np.bool_]) -> NDArray[np.bool_]:
    union: NDArray[np.bool_] = np.logical_or.reduce(support, axis=0)
    return union


def arrange(residual: Functionals, data: Functionals, air_bytes: int) -> Tables:
    """Return tables that give independent residual outputs and words of 64 data outputs."""
    blocks = _cut(residual.octets[:, :air_bytes] != 0)
    blocks.sort(key=lambda block: -int(block.support.sum()))    # most damaged frames are found in the first
    for word in range(-(-len(data.rows) // 64)):
        support = _union(data.octets[word * 64 : word * 64 + 64, :air_bytes] != 0)
        _place(word, support, blocks)
    return _fill(blocks, residual, data)


def _cut(support: NDArray[np.bool_]) -> list[_Block]:
    """Cut outputs, sorted by the bytes they depend on, into the blocks of least cost in all.

    support  bool (output, byte)
    Dynamic programming: least[i], the least cost of the first i outputs, is that of some first i - m
    and one block of the last m. Its bytes are those whose last use is not more than m outputs back.
    """
    keys = np.packbits(support, axis=1)
    order = np.array(sorted(range(len(support)), key=lambda i: keys[i].tobytes()), np.int64)
    rate = np.where(np.arange(1, MANY + 1) > FEW, 1.0, NARROW_COST)
    least, taken = np.zeros(len(order) + 1), np.zeros(len(order) + 1, np.int64)
    last = np.full(support.shape[1], -MANY, np.int64)
    for i, output in enumerate(order, 1):
        last[support[output]] = i
        back = np.minimum(i - last, MANY)
        n_bytes = np.cumsum(np.bincount(back, minlength=MANY + 1)[: min(i, MANY)])
        cost = least[i - len(n_bytes) : i][::-1] + n_bytes * rate[: len(n_bytes)]
        best = int(np.argmin(cost))
        least[i], taken[i] = cost[best] + BLOCK_COST, best + 1
    blocks = []
    end = len(order)
    while end:
        outputs = order[end - taken[end] : end]
        blocks.append(_Block(_union(support[outputs]), outputs))
        end -= int(taken[end])
    return blocks


def _place(word: int, support: NDArray[np.bool_], blocks: list[_Block]) -> None:
    """Add a word of data to the block where it costs least, or to a new one."""
    best, least = None, BLOCK_COST + float(support.sum())
    for block in blocks:
        if block.lanes < LANES:
            more = BLOCK_COST + float((block.support | support).sum()) - block.cost
            if more < least:
                best, least = block, more
    if best is None:
        best = _Block(np.zeros_like(support), np.zeros(0, np.int64))
        blocks.append(best)
    best.support = best.support | support
    best.words.append(word)


def _fill(blocks: list[_Block], residual: Functionals, data: Functionals) -> Tables:
    """Compute the tables of blocks. Blocks with equal tables, as of equal codewords interleaved, share them."""
    positions: list[NDArray[np.int64]] = []
    tables: list[NDArray[np.uint64]] = []
    extent = np.zeros((len(blocks), 4), np.int64)
    constant = np.zeros((len(blocks), LANES), np.uint64)
    word = np.full((len(blocks), LANES), -1, np.int64)
    known: dict[bytes, int] = {}
    position = end = 0
    for b, block in enumerate(blocks):
        outputs = _outputs(block, residual, data)
        at = np.flatnonzero(block.support)
        columns = np.packbits(np.unpackbits(outputs.octets[:, at], axis=1), axis=0, bitorder="little")
        unit = np.zeros((-(-len(at) // AT_ONCE) * AT_ONCE * 8, (MANY if block.wide else FEW) // 8), np.uint8)
        unit[: len(at) * 8] = columns.T[:, : unit.shape[1]]
        key = unit.tobytes()
        if key not in known:
            known[key] = end
            tables.append(_tables(unit.reshape(-1, 8, unit.shape[1]), block.wide))
            end += len(tables[-1])
        padded = np.zeros(len(unit) // 8, np.int64)
        padded[: len(at)] = at
        positions.append(padded)
        extent[b] = position, position + len(padded), known[key], block.wide
        position += len(padded)
        constant[b] = np.packbits(outputs.constant, bitorder="little").view("<u8")
        first = -(-len(block.residual) // 64)
        word[b, first : first + len(block.words)] = block.words
    return Tables(np.concatenate([np.zeros(0, np.int64), *positions]).astype(np.uint64),
                  np.concatenate([np.zeros(0, np.uint64), *tables]), extent, constant, word)


def _outputs(block: _Block, residual: Functionals, data: Functionals) -> Functionals:
    """Return the outputs of a block in the order of its lanes, with zeros where it has none."""
    rows = np.zeros((MANY, residual.rows.shape[1]), np.uint64)
    constant = np.zeros(MANY, np.uint8)
    parts = [(0, residual.take(block.residual))]
    first = -(-len(block.residual) // 64) * 64
    for i, word in enumerate(block.words):
        parts.append((first + i * 64, data.take(np.arange(word * 64, min(word * 64 + 64, len(data.rows))))))
    for at, part in parts:
        rows[at : at + len(part.rows)] = part.rows
        constant[at : at + len(part.rows)] = part.constant
    return Functionals(rows, constant)


def _tables(unit: NDArray[np.uint8], wide: bool) -> NDArray[np.uint64]:
    """Return the tables of a block, one after the other: every entry the sum of the entries of its single bits.

    unit  uint8 (byte of the frame, bit of the byte, byte of the entry), least significant bit first
    """
    parts, values = (2, 16) if wide else (1, 256)
    single = unit.view("<u8" if wide else "<u2").astype(np.uint64 if wide else np.uint16)
    single = single.reshape(len(unit), parts, 8 // parts, -1)
    tables = np.zeros((len(unit), parts, values, single.shape[-1]), single.dtype)
    for k in range(8 // parts):
        tables[:, :, 1 << k : 2 << k] = tables[:, :, : 1 << k] ^ single[:, :, k : k + 1]
    return tables.reshape(-1).view(np.uint64)
