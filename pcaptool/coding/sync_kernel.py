"""Where a known word stands in frames of bits, some of its bits wrong."""

import numpy as np
from numba import njit
from numpy.typing import NDArray


@njit(cache=True, nogil=True)
def find_word(
    bits: NDArray[np.uint8], word: NDArray[np.uint8], places: int, tolerate: int
) -> tuple[NDArray[np.int64], NDArray[np.int32]]:
    """Return (place, wrong bits) of the word in every frame, int64 and int32 (frame,); place -1: none.

    The place with the fewest wrong bits of the first ``places`` ones, the earliest of equals; none
    has more than ``tolerate``.
    """
    place = np.full(bits.shape[0], -1, np.int64)
    wrong = np.zeros(bits.shape[0], np.int32)
    for i in range(bits.shape[0]):
        row = bits[i]
        fewest = tolerate + 1
        for p in range(places):
            errors = 0
            for j in range(len(word)):
                errors += row[p + j] != word[j]
                if errors >= fewest:
                    break
            if errors < fewest:
                place[i], wrong[i], fewest = p, errors, errors
                if errors == 0:
                    break
    return place, wrong
