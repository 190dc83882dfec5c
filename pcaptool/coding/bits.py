"""Bytes of a buffer to bits, one array element each, and bit strings from text."""

import numpy as np
from numba import njit
from numpy.typing import NDArray


@njit(cache=True, nogil=True)
def unpack_rows(buffer: NDArray[np.uint8], start: NDArray[np.int64], n_bytes: int) -> NDArray[np.uint8]:
    """Return the bits of n_bytes bytes from every start, most significant first: uint8 (row, bit)."""
    out = np.empty((len(start), n_bytes * 8), np.uint8)
    for i in range(len(start)):
        for p in range(n_bytes):
            byte = buffer[start[i] + p]
            for k in range(8):
                out[i, 8 * p + k] = (byte >> np.uint8(7 - k)) & np.uint8(1)
    return out


@njit(cache=True, nogil=True)
def take_columns(bits: NDArray[np.uint8], columns: NDArray[np.int64]) -> NDArray[np.uint8]:
    """Return bits[:, columns], frame by frame: uint8 (frame, column)."""
    out = np.empty((bits.shape[0], len(columns)), np.uint8)
    for i in range(bits.shape[0]):
        for j in range(len(columns)):
            out[i, j] = bits[i, columns[j]]
    return out


def bits_of(value: int, width: int) -> NDArray[np.uint8]:
    """Return a number as bits, most significant first: uint8 (width,)."""
    return np.array([value >> (width - 1 - j) & 1 for j in range(width)], np.uint8)


def numbers_of(bits: NDArray[np.uint8]) -> NDArray[np.uint64]:
    """Return rows of at most 64 bits as numbers, first bit most significant: uint64 (row,)."""
    out = np.zeros(bits.shape[:-1], np.uint64)
    for j in range(bits.shape[-1]):
        out = (out << np.uint64(1)) | bits[..., j]
    return out


def bits_from_numbers(values: NDArray[np.uint64], width: int) -> NDArray[np.uint8]:
    """Return numbers as rows of bits, most significant first: uint8 (row, width)."""
    octets = values.astype(">u8").view(np.uint8).reshape(len(values), 8)
    return np.unpackbits(octets, axis=1)[:, 64 - width :]
