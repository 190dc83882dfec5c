"""Walk the records of a classic pcap file, and find the next believable one behind damage.

A record header is believed when its lengths can be (not above a limit, that on the wire not below
the other and not 0) and the fraction of its time stamp is one; when its time is far from that of the
record before, a believable header must follow. Behind damage a place must begin a chain of records
with times near each other, longer when they are far from the last record before (whose header may be
damaged itself), or one that reaches the end of the file exactly. All decisions rest on bytes of the
file alone, never on how it was read, so any piece of a file is walked in the same way.
"""

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

Number = Any                            # in a kernel int64, in Python int
MORE, DAMAGED, FULL = 0, 1, 2
HEADER = 16
SECOND = 1_000_000_000                  # ns
LARGEST_TIMES = 16                      # the limit of what is held: no packet on the wire is larger
CHAIN, FAR_CHAIN = 3, 6                 # records in a row that make a place believable
NEAR = 30 * 86_400 * SECOND             # ns between neighbours behind damage


@njit(cache=True, nogil=True)
def u32(b: NDArray[np.uint8], p: Number, big: bool) -> Number:
    """Return the 32-bit number at p; an unsigned index spares the question whether it counts from the end."""
    q = np.uint64(p)
    one, two, three = q + np.uint64(1), q + np.uint64(2), q + np.uint64(3)
    if big:
        return (np.int64(b[q]) << 24) | (np.int64(b[one]) << 16) | (np.int64(b[two]) << 8) | np.int64(b[three])
    return (np.int64(b[three]) << 24) | (np.int64(b[two]) << 16) | (np.int64(b[one]) << 8) | np.int64(b[q])


@njit(cache=True, nogil=True)
def header(b: NDArray[np.uint8], p: Number, big: bool, unit: int, limit: int) -> tuple[Number, Number, Number]:
    """Return (time in ns, bytes held, bytes on the wire) of the record header at p; held -1: none that can be.

    unit  ns per fraction of a second: 1 or 1000
    """
    fraction, held, size = u32(b, p + 4, big), u32(b, p + 8, big), u32(b, p + 12, big)
    if held > limit or held > size or size == 0 or size > LARGEST_TIMES * limit or fraction * unit >= SECOND:
        return np.int64(0), np.int64(-1), np.int64(0)
    return u32(b, p, big) * SECOND + fraction * unit, held, size


@njit(cache=True, nogil=True)
def walk(
    b: NDArray[np.uint8], at: int, end: int, stop: int, final: bool, big: bool, unit: int, limit: int, near: int,
    start: NDArray[np.int64], held: NDArray[np.int64], size: NDArray[np.int64], time: NDArray[np.int64],
) -> tuple[int, int, int]:
    """Walk records from ``at``; return (records, where the next begins, MORE | DAMAGED | FULL).

    b      uint8 (byte,), filled up to ``end``, where the file ends if ``final``; records that begin at
           ``stop`` or behind are left
    near   ns; time of the record before, or negative when there is none
    start, held, size, time  (record,)  filled: first data byte, bytes held, bytes on the wire, ns
    """
    n, most = 0, len(start)
    while at < stop:
        if n == most:
            return n, at, FULL
        if at + HEADER > end:
            return n, at, MORE
        t, captured, wire = header(b, at, big, unit, limit)
        if captured < 0:
            return n, at, DAMAGED
        behind = at + HEADER + captured
        if behind > end:
            return n, at, MORE
        if near >= 0 and abs(t - near) > NEAR and not (final and behind == end):
            if behind + HEADER > end:
                return n, at, DAMAGED if final else MORE
            following, good, _ = header(b, behind, big, unit, limit)
            if good < 0 or (abs(following - t) > NEAR and abs(following - near) > NEAR):
                return n, at, DAMAGED
        start[n], held[n], size[n], time[n] = at + HEADER, captured, wire, t
        near = t
        n += 1
        at = behind
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
    while at + HEADER <= end:
        p, good, chain, before, cut = at, 0, CHAIN, near, False
        while good < chain:
            if p == end and final and good > 0:
                return at, True
            if p + HEADER > end:
                cut = True
                break
            time, captured, _ = header(b, p, big, unit, limit)
            if captured <= 0:
                break
            if before >= 0 and abs(time - before) > NEAR:
                if good > 0:
                    break
                chain = FAR_CHAIN
            if p + HEADER + captured > end:
                cut = True
                break
            before = time
            p += HEADER + captured
            good += 1
        if good == chain:
            return at, True
        if cut and not final:
            return at, False
        if cut and good > 0 and (chain == CHAIN or good >= CHAIN):      # the file's last record is cut
            return at, True
        at += 1
    return (end if final else at), False
