"""Bytes of a buffer to bits, one array element each; columns of bits; numbers to bits and back."""

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

# Eight bits of every byte, most significant first, as the eight bytes of one number
_SPREAD = np.unpackbits(np.arange(256, dtype=np.uint8)[:, None], axis=1).view(np.uint64)[:, 0].copy()


@njit(cache=True, nogil=True)
def _spread(
    buffer: NDArray[np.uint8], start: NDArray[np.int64], n_bytes: int, table: NDArray[np.uint64]
) -> NDArray[np.uint64]:
    out = np.empty((len(start), n_bytes), np.uint64)
    for i in range(len(start)):
        for p in range(n_bytes):
            out[i, p] = table[buffer[start[i] + p]]
    return out


def unpack_rows(buffer: NDArray[np.uint8], start: NDArray[np.int64], n_bytes: int) -> NDArray[np.uint8]:
    """Return the bits of n_bytes bytes from every start, most significant first: uint8 (row, bit).

    The caller makes sure that every row lies in the buffer.
    """
    return _spread(buffer, start, n_bytes, _SPREAD).view(np.uint8).reshape(len(start), n_bytes * 8)


@njit(cache=True, nogil=True, inline="always")
def word_at(row: NDArray[np.uint8], first: Any) -> np.uint64:
    """Return eight bytes as a number, first byte least significant; written so that it becomes one load."""
    j, one = np.uint64(first), np.uint64(1)     # an unsigned index needs no look whether it is negative
    return (np.uint64(row[j])
            | np.uint64(row[j + one]) << np.uint64(8)
            | np.uint64(row[j + np.uint64(2)]) << np.uint64(16)
            | np.uint64(row[j + np.uint64(3)]) << np.uint64(24)
            | np.uint64(row[j + np.uint64(4)]) << np.uint64(32)
            | np.uint64(row[j + np.uint64(5)]) << np.uint64(40)
            | np.uint64(row[j + np.uint64(6)]) << np.uint64(48)
            | np.uint64(row[j + np.uint64(7)]) << np.uint64(56))


@njit(cache=True, nogil=True, inline="always")
def octet_at(row: NDArray[np.uint8], first: Any) -> np.uint64:
    """Return eight bits as a number, first bit most significant: one multiplication gathers them."""
    return (word_at(row, first) * np.uint64(0x8040201008040201)) >> np.uint64(56)


@njit(cache=True, nogil=True)
def _take(bits: NDArray[Any], columns: NDArray[np.uint64], out: NDArray[Any]) -> None:
    """Fill out[i, j] = bits[i, columns[j]]; an unsigned index spares the question whether it counts from the end."""
    for i in range(bits.shape[0]):
        row, to = bits[i], out[i]
        for j in range(len(columns)):
            to[j] = row[columns[j]]


def take_columns(bits: NDArray[np.uint8], columns: NDArray[np.int64]) -> NDArray[np.uint8]:
    """Return bits[:, columns], frame by frame: uint8 (frame, column).

    Where columns come in whole groups of eight, eight bits are moved at a time.
    """
    bits = np.ascontiguousarray(bits)
    out = np.empty((len(bits), len(columns)), np.uint8)
    if bits.shape[1] % 8 == 0 and len(columns) % 8 == 0 and len(columns):
        groups = columns.reshape(len(columns) // 8, 8)
        if not (groups[:, 0] % 8).any() and (groups == groups[:, :1] + np.arange(8)).all():
            _take(bits.view(np.uint64), (groups[:, 0] // 8).astype(np.uint64), out.view(np.uint64))
            return out
    _take(bits, columns.astype(np.uint64), out)
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
