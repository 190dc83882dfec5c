"""The loops of the proof: sums of table entries for many frames at once, and independent rows over GF(2)."""

from typing import Any

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.core import cgutils
from numba.extending import intrinsic
from numpy.typing import NDArray

LANES = 4           # 64-bit words that an entry of a wide block holds side by side
AT_ONCE = 4         # byte positions whose entries are added in one pass over the frames, as written out below
FRAMES = 128        # frames in flight: their sums and the tables of one pass stay in the first-level cache

# Entries of one byte position. A wide block looks up both halves of a byte, entries of LANES words; a narrow
# one the whole byte, entries of 16 bits: the tables of either are small enough to stay near
WIDE = 2 * 16 * LANES       # words
NARROW = 256                # entries


@intrinsic
def _add_entries(typing_context: Any, sums: Any, at: Any, tables: Any, entries: Any) -> Any:
    """sums[at : at + LANES] ^= tables[e : e + LANES] for every e of a tuple of entries, as vectors.

    Written out because the compiler, as numba drives it, makes no vectors of loops as short as LANES.
    """
    def build(context: Any, builder: Any, signature: Any, values: Any) -> Any:
        vector = ir.VectorType(ir.IntType(64), LANES)

        def lanes(array: int, index: Any) -> Any:
            words = context.make_array(signature.args[array])(context, builder, values[array]).data
            return builder.bitcast(builder.gep(words, [index]), vector.as_pointer())

        target = lanes(0, values[1])
        total = builder.load(target, align=8)
        for entry in cgutils.unpack_tuple(builder, values[3]):  # type: ignore[no-untyped-call]
            total = builder.xor(total, builder.load(lanes(2, entry), align=8))
        builder.store(total, target, align=8)
        return context.get_dummy_value()

    return types.void(sums, at, tables, entries), build


@njit(cache=True, nogil=True)
def _add_wide(
    buffer: NDArray[np.uint8],
    first: NDArray[np.uint64],
    frames: int,
    positions: NDArray[np.uint64],
    tables: NDArray[np.uint64],
    sums: NDArray[np.uint64],
) -> None:
    """Add the entries of all positions to the sums of the frames, LANES words each.

    An entry of the lower half of byte b lies at (b & 15) * 4, of the upper half at 64 + (b >> 4) * 4.
    """
    two, mask, upper = np.uint64(2), np.uint64(15 * LANES), np.uint64(16 * LANES)
    for q in range(0, len(positions), AT_ONCE):
        p0, p1, p2, p3 = positions[q], positions[q + 1], positions[q + 2], positions[q + 3]
        t0 = np.uint64(q) * np.uint64(WIDE)
        t1 = t0 + np.uint64(WIDE)
        t2 = t1 + np.uint64(WIDE)
        t3 = t2 + np.uint64(WIDE)
        u0, u1, u2, u3 = t0 + upper, t1 + upper, t2 + upper, t3 + upper
        for i in range(frames):
            at = first[i]
            b0, b1 = np.uint64(buffer[at + p0]), np.uint64(buffer[at + p1])
            b2, b3 = np.uint64(buffer[at + p2]), np.uint64(buffer[at + p3])
            _add_entries(sums, np.uint64(i) << two, tables, (   # type: ignore[call-arg]  # numba gives the context
                t0 + (b0 << two & mask), u0 + (b0 >> two & mask),
                t1 + (b1 << two & mask), u1 + (b1 >> two & mask),
                t2 + (b2 << two & mask), u2 + (b2 >> two & mask),
                t3 + (b3 << two & mask), u3 + (b3 >> two & mask)))


@njit(cache=True, nogil=True)
def _add_narrow(
    buffer: NDArray[np.uint8],
    first: NDArray[np.uint64],
    frames: int,
    positions: NDArray[np.uint64],
    tables: NDArray[np.uint16],
    sums: NDArray[np.uint64],
) -> None:
    """Add the entries of all positions to the first word of the sums of the frames."""
    two = np.uint64(2)
    for q in range(0, len(positions), AT_ONCE):
        p0, p1, p2, p3 = positions[q], positions[q + 1], positions[q + 2], positions[q + 3]
        t0 = np.uint64(q) * np.uint64(NARROW)
        t1 = t0 + np.uint64(NARROW)
        t2 = t1 + np.uint64(NARROW)
        t3 = t2 + np.uint64(NARROW)
        for i in range(frames):
            at = first[i]
            sums[np.uint64(i) << two] ^= (
                tables[t0 + buffer[at + p0]] ^ tables[t1 + buffer[at + p1]]
                ^ tables[t2 + buffer[at + p2]] ^ tables[t3 + buffer[at + p3]])


@njit(cache=True, nogil=True)
def prove(
    buffer: NDArray[np.uint8],
    start: NDArray[np.int64],
    positions: NDArray[np.uint64],
    tables: NDArray[np.uint64],
    extent: NDArray[np.int64],
    constant: NDArray[np.uint64],
    word: NDArray[np.int64],
    undamaged: NDArray[np.bool_],
    data: NDArray[np.uint64],
) -> None:
    """Decide for every frame whether its residual is zero, and give its data words.

    buffer     uint8 (byte,); a frame begins at each start
    positions  uint64 (position,)  byte positions in a frame, those of each block in a row
    tables     uint64 (entry,)     tables of all blocks, narrow ones four entries to a word
    extent     int64 (block, 4)    first position, end of positions, first word of tables, 1 wide or 0 narrow
    constant   uint64 (block, LANES)  the sums of the zero frame
    word       int64 (block, LANES)   data word that a lane gives; -1: residual, zero when undamaged
    undamaged  bool (frame,), filled
    data       uint64 (frame, word), filled for undamaged frames
    """
    first = np.empty(FRAMES, np.uint64)     # of the frames still undamaged: where they begin,
    row = np.empty(FRAMES, np.int64)        # which they are,
    sums = np.empty(FRAMES * LANES, np.uint64)      # and what their entries add up to
    for begin in range(0, len(start), FRAMES):
        alive = min(FRAMES, len(start) - begin)
        for i in range(alive):
            row[i] = begin + i
            first[i] = start[begin + i]
        for block in range(len(extent)):
            low, high, table, wide = extent[block, 0], extent[block, 1], extent[block, 2], extent[block, 3]
            for i in range(alive):
                for lane in range(LANES):
                    sums[i * LANES + lane] = constant[block, lane]
            if wide:
                _add_wide(buffer, first, alive, positions[low:high], tables[table:], sums)
            else:
                _add_narrow(buffer, first, alive, positions[low:high], tables[table:].view(np.uint16), sums)
            kept = 0
            for i in range(alive):
                bad = np.uint64(0)
                for lane in range(LANES):
                    if word[block, lane] < 0:
                        bad |= sums[i * LANES + lane]
                    else:
                        data[row[i], word[block, lane]] = sums[i * LANES + lane]
                if bad == 0:
                    row[kept], first[kept] = row[i], first[i]
                    kept += 1
            alive = kept
        for i in range(begin, min(begin + FRAMES, len(start))):
            undamaged[i] = False
        for i in range(alive):
            undamaged[row[i]] = True


@njit(cache=True, nogil=True)
def independent(rows: NDArray[np.uint64], constant: NDArray[np.uint8], kept: NDArray[np.bool_]) -> bool:
    """Find the rows that are independent of those before them; return whether all can be zero at once.

    rows      uint64 (row, word)  coefficients over GF(2), 64 to a word; overwritten
    constant  uint8 (row,)        what is added to each; overwritten
    kept      bool (row,)         filled
    Gaussian elimination row by row, each pivot the last coefficient of its row: check bits stand
    behind the data they check, so rows of checks mostly have a pivot of their own.
    """
    words = rows.shape[1]
    pivot = np.full(words * 64, -1, np.int64)
    for i in range(len(rows)):
        kept[i] = False
        w = words - 1
        while w >= 0 and not kept[i]:
            if rows[i, w] == 0:
                w -= 1
                continue
            last = 63
            while rows[i, w] >> np.uint64(last) == 0:
                last -= 1
            j = pivot[w * 64 + last]
            if j < 0:
                pivot[w * 64 + last] = i
                kept[i] = True
            else:
                for v in range(w + 1):
                    rows[i, v] ^= rows[j, v]
                constant[i] ^= constant[j]
        if not kept[i] and constant[i]:
            return False
    return True
