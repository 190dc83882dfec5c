"""Where two batches of words differ, bit by bit."""

import numpy as np
from numba import njit
from numpy.typing import NDArray


@njit(cache=True, nogil=True)
def count_differences(a: NDArray[np.uint8], b: NDArray[np.uint8]) -> NDArray[np.int32]:
    """Return for every frame the number of bits that differ: int32 (frame,)."""
    n, width = a.shape
    count = np.zeros(n, np.int32)
    for i in range(n):
        differing = 0
        for j in range(width):
            differing += a[i, j] != b[i, j]
        count[i] = differing
    return count


@njit(cache=True, nogil=True)
def find_differences(
    a: NDArray[np.uint8], b: NDArray[np.uint8], rows: NDArray[np.int64], total: int
) -> tuple[NDArray[np.int64], NDArray[np.int32]]:
    """Return (row, position) of all bits that differ in the given rows, in order.

    total  how many there are, from count_differences
    """
    frame = np.empty(total, np.int64)
    position = np.empty(total, np.int32)
    k = 0
    for i in rows:
        for j in range(a.shape[1]):
            if a[i, j] != b[i, j]:
                frame[k] = i
                position[k] = j
                k += 1
    return frame, position
