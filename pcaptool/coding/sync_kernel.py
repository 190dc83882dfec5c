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
def _believed(row: NDArray[np.uint8], p: int, n: int, word: NDArray[np.uint8], tolerate: int, every: int, slip: int,
              flywheel: int) -> bool:
    """Return whether a word stands at a place and one of the next is in its place, or the row ends before the next."""
    if _wrong(row, p, word, tolerate) > tolerate:
        return False
    for k in range(1, flywheel + 2):
        behind = p + k * every
        if behind + len(word) > n:
            return k == 1
        if _near(row, behind, n, word, tolerate, k * slip) >= 0:
            return True
    return False


@njit(cache=True, nogil=True)
def all_words(bits: NDArray[np.uint8], length: NDArray[np.int64], word: NDArray[np.uint8], tolerate: int, every: int,
              slip: int, flywheel: int) -> NDArray[np.int64]:
    """Return (row, begin) of every frame of ``every`` bits that begins with a sync word: int64 (frame, 2).

    Out of lock, a place is believed where the next sync word is in its place, or one of the ``flywheel``
    ones behind it, or where the row ends before the next. Frames given out on trust at the end of a row
    give way to a believable word behind the last one that was recognised.
    """
    room, count = 64, 0
    out = np.empty((room, 2), np.int64)
    for i in range(bits.shape[0]):
        row, n = bits[i], length[i]
        p, locked, missed, last = 0, False, 0, 0
        while True:
            if p + every > n:
                if not (locked and missed):
                    break
                again = last + 1
                while again + every <= n and not _believed(row, again, n, word, tolerate, every, slip, 0):
                    again += 1
                if again + every > n:
                    break
                count, p, locked, missed = count - missed, again, False, 0
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
                locked = _believed(row, p, n, word, tolerate, every, slip, flywheel)
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
