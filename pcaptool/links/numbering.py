"""Number 64-bit keys in the order they first appear: a hash table with open addressing."""

import numpy as np
from numba import njit
from numpy.typing import NDArray

MULTIPLIER = np.uint64(0x9E3779B97F4A7C15)      # Knuth, TAOCP vol. 3, 6.4


@njit(cache=True, nogil=True)
def look_up(
    keys: NDArray[np.uint64], table_keys: NDArray[np.uint64], table_numbers: NDArray[np.int64]
) -> NDArray[np.int64]:
    """Return the number of every key, -1 where it has none: int64 (key,)."""
    mask = np.uint64(len(table_keys) - 1)
    out = np.empty(len(keys), np.int64)
    for i in range(len(keys)):
        key = keys[i]
        at = ((key * MULTIPLIER) >> np.uint64(32)) & mask
        while table_numbers[at] >= 0 and table_keys[at] != key:
            at = (at + np.uint64(1)) & mask
        out[i] = table_numbers[at]
    return out


class Numbering:
    """Keys and their numbers."""

    def __init__(self) -> None:
        self.keys: list[int] = []
        self._table_keys = np.zeros(64, np.uint64)
        self._table_numbers = np.full(64, -1, np.int64)

    def __len__(self) -> int:
        return len(self.keys)

    def find(self, keys: NDArray[np.uint64]) -> NDArray[np.int64]:
        """Return numbers, -1 for keys not known."""
        return look_up(keys, self._table_keys, self._table_numbers)

    def number(self, keys: NDArray[np.uint64]) -> NDArray[np.int64]:
        """Return numbers; keys not known get the next ones, in ascending order of key."""
        numbers = self.find(keys)
        new = numbers < 0
        if not new.any():
            return numbers
        for key in np.unique(keys[new]):
            self._add(key)
        return self.find(keys)

    def _add(self, key: np.uint64) -> None:
        self.keys.append(int(key))
        if 2 * len(self.keys) > len(self._table_keys):
            self._table_keys = np.zeros(2 * len(self._table_keys), np.uint64)
            self._table_numbers = np.full(len(self._table_keys), -1, np.int64)
            for number, old in enumerate(self.keys):
                self._put(old, number)
        else:
            self._put(int(key), len(self.keys) - 1)

    def _put(self, key: int, number: int) -> None:
        mask = len(self._table_keys) - 1
        at = (((key * int(MULTIPLIER)) & (2**64 - 1)) >> 32) & mask
        while self._table_numbers[at] >= 0:
            at = (at + 1) & mask
        self._table_keys[at], self._table_numbers[at] = key, number
