"""The UDP checksum of datagrams, RFC 768 and RFC 8200, 8.1."""

import numpy as np
from numba import njit
from numpy.typing import NDArray

from pcaptool.capture.datagrams import Datagrams
from pcaptool.capture.headers import u64


@njit(cache=True, nogil=True)
def _sums(
    b: NDArray[np.uint8], start: NDArray[np.int64], size: NDArray[np.int32], held: NDArray[np.int32],
    source: NDArray[np.uint64], destination: NDArray[np.uint64],
    ports: NDArray[np.uint16], ports_to: NDArray[np.uint16],
    version: NDArray[np.uint8], checksum: NDArray[np.uint16], rows: NDArray[np.int64],
) -> NDArray[np.int8]:
    """Return 1 good, 0 bad, -1 absent or cut: int8 (row,)."""
    out = np.empty(len(rows), np.int8)
    for r in range(len(rows)):
        i = rows[r]
        if held[i] < size[i] or (checksum[i] == 0 and version[i] == 4):
            out[r] = -1
            continue
        if checksum[i] == 0:
            out[r] = 0
            continue
        total = np.uint64(17) + np.uint64(2 * (size[i] + 8)) + np.uint64(checksum[i])
        total += np.uint64(ports[i]) + np.uint64(ports_to[i])
        for half in range(2):
            for address in (source[i, half], destination[i, half]):
                total += (address >> np.uint64(32)) + (address & np.uint64(0xFFFFFFFF))
        p, end = start[i], start[i] + size[i]
        while p + 8 <= end:             # 32 bits at a time, RFC 1071, 2 (C)
            word = u64(b, p)
            total += (word >> np.uint64(32)) + (word & np.uint64(0xFFFFFFFF))
            p += 8
        for k in range(end - p):
            total += np.uint64(b[p + k]) << np.uint64(0 if k % 2 else 8)
        while total >> np.uint64(16):
            total = (total & np.uint64(0xFFFF)) + (total >> np.uint64(16))
        out[r] = total == np.uint64(0xFFFF)
    return out


def udp_checksum_ok(d: Datagrams, rows: NDArray[np.int64]) -> NDArray[np.int8]:
    """Return 1 good, 0 bad, -1 absent or not checkable because cut, for some datagrams: int8 (row,)."""
    return _sums(d.buffer, d.start, d.size, d.held, d.source, d.destination, d.source_port, d.destination_port,
                 d.version, d.checksum, rows)
