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


@njit(cache=True, nogil=True)
def _wrong(row: NDArray[np.uint8], at: int, word: NDArray[np.uint8], most: int) -> int:
    """Return the wrong bits of a word that begins at a place, counted up to most + 1."""
    errors = 0
    for j in range(len(word)):
        errors += row[at + j] != word[j]
        if errors > most:
            break
    return errors


@njit(cache=True, nogil=True)
def _near(row: NDArray[np.uint8], at: int, n: int, word: NDArray[np.uint8], tolerate: int, slip: int) -> int:
    """Return where the word stands at most ``slip`` bits beside a place, the nearest of the best; -1: nowhere."""
    best, fewest = -1, tolerate + 1
    for k in range(2 * slip + 1):
        off = (k + 1) // 2 if k % 2 else -(k // 2)      # 0, 1, -1, 2, -2 ...
        p = at + off
        if 0 <= p and p + len(word) <= n:
            errors = _wrong(row, p, word, fewest - 1)
            if errors < fewest:
                best, fewest = p, errors
    return best


@njit(cache=True, nogil=True)
def all_words(bits: NDArray[np.uint8], length: NDArray[np.int64], word: NDArray[np.uint8], tolerate: int, every: int,
              slip: int, flywheel: int) -> NDArray[np.int64]:
    """Return (row, begin) of every frame of ``every`` bits that begins with a sync word: int64 (frame, 2).

    Out of lock, a place is believed where the next sync word is in its place, or one of the ``flywheel``
    ones behind it, or where the row ends before any of them.
    """
    room, count = 64, 0
    out = np.empty((room, 2), np.int64)
    for i in range(bits.shape[0]):
        row, n = bits[i], length[i]
        p, locked, missed, last = 0, False, 0, 0
        while p + every <= n:
            if locked:
                at = _near(row, p, n, word, tolerate, slip)
                if at >= 0 and at + every <= n:
                    p, missed = at, 0
                elif at >= 0:
                    break
                elif missed < flywheel:
                    missed += 1
                else:
                    locked, p = False, last + len(word)
                    count -= missed                     # what was given out on trust alone was no frame
                    continue
            else:
                if _wrong(row, p, word, tolerate) > tolerate:
                    p += 1
                    continue
                for k in range(1, flywheel + 2):
                    behind = p + k * every
                    if behind + len(word) > n or _near(row, behind, n, word, tolerate, k * slip) >= 0:
                        locked = True
                        break
                if not locked:
                    p += 1
                    continue
                missed = 0
            if missed == 0:
                last = p
            if count == room:
                more = np.empty((2 * room, 2), np.int64)
                more[:room] = out
                out, room = more, 2 * room
            out[count, 0], out[count, 1] = i, p
            count += 1
            p += every
    return out[:count]
