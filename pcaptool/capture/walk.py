"""Walk the records of a classic pcap file, and find the next believable one behind damage.

A record header is believed when its length can be (not above a limit, not above the length on the
wire) and the fraction of its time stamp is one. Behind damage a place must begin a chain of records,
or reach the end of the file exactly, with times near those before. All decisions rest on bytes of
the file alone, never on how it was read, so any piece of a file is walked in the same way.
"""

import numpy as np
from numba import njit
from numpy.typing import NDArray

MORE, DAMAGED, FULL = 0, 1, 2
HEADER = 16
CHAIN = 3                               # records in a row that make a place believable
NEAR = 30 * 86_400 * 1_000_000_000      # ns between neighbours behind damage


@njit(cache=True, nogil=True, inline="never")
def u32(b: NDArray[np.uint8], p: int, big: bool) -> int:
    """Return the 32-bit number at p."""
    if big:
        return (np.int64(b[p]) << 24) | (np.int64(b[p + 1]) << 16) | (np.int64(b[p + 2]) << 8) | np.int64(b[p + 3])
    return (np.int64(b[p + 3]) << 24) | (np.int64(b[p + 2]) << 16) | (np.int64(b[p + 1]) << 8) | np.int64(b[p])


@njit(cache=True, nogil=True)
def walk(
    b: NDArray[np.uint8], at: int, end: int, stop: int, big: bool, unit: int, limit: int,
    start: NDArray[np.int64], held: NDArray[np.int64], size: NDArray[np.int64], time: NDArray[np.int64],
) -> tuple[int, int, int]:
    """Walk records from ``at``; return (records, where the next begins, MORE | DAMAGED | FULL).

    b      uint8 (byte,), filled up to ``end``; records that begin at ``stop`` or behind are left
    unit   ns per fraction of a second: 1 or 1000
    start, held, size, time  (record,)  filled: first data byte, bytes held, bytes on the wire, ns
    """
    n, most, fractions = 0, len(start), 1_000_000_000 // unit
    while at < stop:
        if n == most:
            return n, at, FULL
        if at + HEADER > end:
            return n, at, MORE
        fraction, captured, wire = u32(b, at + 4, big), u32(b, at + 8, big), u32(b, at + 12, big)
        if captured > limit or captured > wire or fraction >= fractions:
            return n, at, DAMAGED
        if at + HEADER + captured > end:
            return n, at, MORE
        start[n] = at + HEADER
        held[n] = captured
        size[n] = wire
        time[n] = u32(b, at, big) * 1_000_000_000 + fraction * unit
        n += 1
        at += HEADER + captured
    return n, at, MORE


@njit(cache=True, nogil=True)
def find_record(
    b: NDArray[np.uint8], at: int, end: int, final: bool, big: bool, unit: int, limit: int, near: int
) -> tuple[int, bool]:
    """Return (place, found) of the first believable record from ``at`` on.

    final  the file ends at ``end``; otherwise a place that needs more bytes to judge is returned,
           not found, to be looked at again
    near   ns; time of the record before the damage, or negative when there is none
    """
    fractions = 1_000_000_000 // unit
    while at + HEADER <= end:
        p, good, open_end = at, 0, False
        while good < CHAIN:
            if p == end and final and good > 0:
                return at, True
            if p + HEADER > end:
                open_end = True
                break
            fraction, captured, wire = u32(b, p + 4, big), u32(b, p + 8, big), u32(b, p + 12, big)
            if captured == 0 or captured > limit or captured > wire or wire > 16 * limit or fraction >= fractions:
                break
            t = u32(b, p, big) * 1_000_000_000 + fraction * unit
            if near >= 0 and abs(t - near) > NEAR:
                break
            if p + HEADER + captured > end:
                open_end = True
                break
            p += HEADER + captured
            good += 1
        if good == CHAIN:
            return at, True
        if open_end and not final:
            return at, False
        if open_end and good > 0:       # the file's last records, the very last cut short
            return at, True
        at += 1
    return (end if final else at), False
