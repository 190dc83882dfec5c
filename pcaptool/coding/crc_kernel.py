"""CRC of a batch of byte frames, sixteen bytes a step.

The register is kept so that the byte which leaves next is the lowest: bit-reflected for codes that
send bytes least significant bit first, byte-swapped and left-aligned for the others. Both kinds then
run through the same loop. Method: slicing-by-8, Kounavis and Berry (2005), here by 16.
"""

import numpy as np
from numba import njit
from numpy.typing import NDArray

SLICES = 16


def _reflect(value: int, width: int) -> int:
    return int(format(value, f"0{width}b")[::-1], 2)


def _swap(value: int) -> int:
    return int.from_bytes(value.to_bytes(8, "big"), "little")


def tables(width: int, poly: int, reflected: bool) -> NDArray[np.uint64]:
    """Return uint64 (SLICES, 256): the register after one byte and then 0, 1, 2 ... zero bytes."""
    first = []
    if reflected:
        generator = _reflect(poly, width)
        for byte in range(256):
            register = byte
            for _ in range(8):
                register = register >> 1 ^ (generator if register & 1 else 0)
            first.append(register)
    else:
        generator, mask = poly << (64 - width), 2**64 - 1
        for byte in range(256):
            register = byte << 56
            for _ in range(8):
                register = (register << 1 ^ (generator if register >> 63 else 0)) & mask
            first.append(_swap(register))
    out = [np.array(first, np.uint64)]
    for _ in range(SLICES - 1):
        last = out[-1]
        out.append((last >> np.uint64(8)) ^ out[0][(last & np.uint64(255)).astype(np.int64)])
    return np.stack(out)


def to_register(value: int, width: int, reflected: bool) -> int:
    """Return an unreflected register value (Williams model) as the kernel keeps it."""
    return _reflect(value, width) if reflected else _swap(value << (64 - width))


@njit(cache=True, nogil=True)
def _load(frame: NDArray[np.uint8], j: int) -> np.uint64:
    """Return eight bytes as a number, first byte lowest."""
    return (np.uint64(frame[j]) | np.uint64(frame[j + 1]) << np.uint64(8)
            | np.uint64(frame[j + 2]) << np.uint64(16) | np.uint64(frame[j + 3]) << np.uint64(24)
            | np.uint64(frame[j + 4]) << np.uint64(32) | np.uint64(frame[j + 5]) << np.uint64(40)
            | np.uint64(frame[j + 6]) << np.uint64(48) | np.uint64(frame[j + 7]) << np.uint64(56))


@njit(cache=True, nogil=True)
def _slice(t: NDArray[np.uint64], s: int, r: np.uint64) -> np.uint64:
    """Return what eight bytes, s bytes before the end of the step, add to the register."""
    added: np.uint64 = (((t[s + 7, np.uint8(r)] ^ t[s + 6, np.uint8(r >> np.uint64(8))])
                         ^ (t[s + 5, np.uint8(r >> np.uint64(16))] ^ t[s + 4, np.uint8(r >> np.uint64(24))]))
                        ^ ((t[s + 3, np.uint8(r >> np.uint64(32))] ^ t[s + 2, np.uint8(r >> np.uint64(40))])
                           ^ (t[s + 1, np.uint8(r >> np.uint64(48))] ^ t[s, np.uint8(r >> np.uint64(56))])))
    return added


@njit(cache=True, nogil=True)
def run(data: NDArray[np.uint8], n_bytes: NDArray[np.int64], t: NDArray[np.uint64], init: np.uint64
        ) -> NDArray[np.uint64]:
    """Return the registers behind n_bytes bytes of every frame: uint64 (frame,)."""
    out = np.empty(data.shape[0], np.uint64)
    for i in range(data.shape[0]):
        frame = data[i]
        n = n_bytes[i]
        r = init
        j = 0
        while j + 16 <= n:
            r = _slice(t, 8, r ^ _load(frame, j)) ^ _slice(t, 0, _load(frame, j + 8))
            j += 16
        if j + 8 <= n:
            r = _slice(t, 0, r ^ _load(frame, j))
            j += 8
        while j < n:
            r = (r >> np.uint64(8)) ^ t[0, np.uint8(r) ^ frame[j]]
            j += 1
        out[i] = r
    return out
