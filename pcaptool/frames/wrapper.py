"""Take datagrams apart: which a profile claims, their wrapper fields, and where the air frames lie."""

from collections.abc import Sequence
from dataclasses import dataclass
from ipaddress import ip_network

import numpy as np
from numba import njit
from numpy.typing import NDArray

from pcaptool.capture.datagrams import Datagrams
from pcaptool.profile import Profile, WrapperField


@njit(cache=True, nogil=True)
def read_fields(
    buffer: NDArray[np.uint8], start: NDArray[np.int64], spec: NDArray[np.int64], values: NDArray[np.int64]
) -> None:
    """Read byte fields: values int64 (field, row) from spec rows (offset, bytes, big, signed)."""
    for f in range(len(spec)):
        offset, size, big, signed = spec[f, 0], spec[f, 1], spec[f, 2], spec[f, 3]
        step = np.uint64(1 if big else -1)              # wraps: from the last byte back
        for i in range(len(start)):
            value = np.int64(0)
            at = np.uint64(start[i] + offset + (0 if big else size - 1))
            for _ in range(size):
                value = (value << 8) | np.int64(buffer[at])
                at += step
            if signed and size < 8 and value >> (8 * size - 1):
                value -= np.int64(1) << (8 * size)
            values[f, i] = value


class FieldGroup:
    """Consecutive wrapper fields."""

    def __init__(self, fields: Sequence[WrapperField], order: str) -> None:
        self.fields = tuple(fields)
        sizes = [f.bytes for f in fields]
        self.bytes = sum(sizes)
        offsets = np.cumsum([0, *sizes])[:-1]
        self.spec = np.array(
            [(o, f.bytes, (f.order or order) == "big", f.signed) for o, f in zip(offsets, fields, strict=True)],
            np.int64,
        ).reshape(len(sizes), 4)

    def read(self, buffer: NDArray[np.uint8], start: NDArray[np.int64]) -> NDArray[np.int64]:
        values = np.empty((len(self.fields), len(start)), np.int64)
        if len(self.fields):
            read_fields(buffer, start, self.spec, values)
        return values

    def fits(self, values: NDArray[np.int64]) -> NDArray[np.bool_]:
        """Return which rows have every fixed value where it must be."""
        good = np.ones(values.shape[1], np.bool_)
        for field, value in zip(self.fields, values, strict=True):
            if field.must_be is not None:
                good &= value == field.must_be
        return good


@dataclass(slots=True)
class AirFrames:
    """Air frames found in datagrams, in the order of the datagrams and of the frames in them.

    row     int64 (frame,)   row of the datagram in its batch
    slot    int64 (frame,)   position among the frames of the datagram
    start   int64 (frame,)   first byte in the batch's buffer
    held    int64 (frame,)   bytes that are there
    sent    int64 (frame,)   bytes that the wrapper announces; more than held: short
    bits    int64 (frame,)   bits received on the air
    fields  name -> int64 (frame,)  wrapper fields
    """

    row: NDArray[np.int64]
    slot: NDArray[np.int64]
    start: NDArray[np.int64]
    held: NDArray[np.int64]
    sent: NDArray[np.int64]
    bits: NDArray[np.int64]
    fields: dict[str, NDArray[np.int64]]

    def take(self, keep: NDArray[np.int64]) -> "AirFrames":
        return AirFrames(self.row[keep], self.slot[keep], self.start[keep], self.held[keep], self.sent[keep],
                         self.bits[keep], {name: v[keep] for name, v in self.fields.items()})


class Unwrapper:
    """The compiled carrier and wrapper of a profile."""

    def __init__(self, profile: Profile) -> None:
        wrapper = profile.wrapper
        self.wrapper = wrapper
        self.ports = np.array(profile.carrier.port, np.uint16)
        self.opening = np.frombuffer(profile.carrier.opening, np.uint8)
        self.nets = []
        for text in profile.carrier.net:
            net = ip_network(text)
            mask, base = int(net.netmask), int(net.network_address)
            halves = [np.uint64(v) for v in (mask >> 64, mask & (2**64 - 1), base >> 64, base & (2**64 - 1))]
            self.nets.append((net.version, *halves))
        self.before = FieldGroup(wrapper.before, wrapper.order)
        self.each = FieldGroup(wrapper.each, wrapper.order)
        self.after = FieldGroup(wrapper.after, wrapper.order)
        self.many = bool(wrapper.frames) or bool(wrapper.each) or isinstance(wrapper.frame_bytes, int)

    def claim(self, d: Datagrams) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Return rows (claimed, cut): cut ones match so far but lack the bytes to tell."""
        match = np.zeros(len(d), np.bool_)
        for port in self.ports:
            match |= (d.source_port == port) | (d.destination_port == port)
        rows = np.flatnonzero(match)
        if self.nets and len(rows):
            inside = np.zeros(len(rows), np.bool_)
            for version, mask_high, mask_low, base_high, base_low in self.nets:
                for address in (d.source[rows], d.destination[rows]):
                    inside |= ((d.version[rows] == version) & ((address[:, 0] & mask_high) == base_high)
                               & ((address[:, 1] & mask_low) == base_low))
            rows = rows[inside]
        need = max(self.before.bytes + self.after.bytes, len(self.opening))
        rows = rows[d.size[rows] >= need]
        whole = d.held[rows] >= max(self.before.bytes, len(self.opening))
        cut, rows = rows[~whole], rows[whole]
        if len(self.opening) and len(rows):
            at = d.start[rows][:, None] + np.arange(len(self.opening))
            rows = rows[(d.buffer[at] == self.opening).all(axis=1)]
        return rows, cut

    def take_apart(self, d: Datagrams, rows: NDArray[np.int64]) -> tuple[NDArray[np.int64], AirFrames]:
        """Return (rows whose fixed wrapper values fit, their air frames)."""
        before = self.before.read(d.buffer, d.start[rows])
        fits = self.before.fits(before)
        if not fits.all():
            rows, before = rows[fits], before[:, fits]
        start, held, size = d.start[rows], d.held[rows].astype(np.int64), d.size[rows].astype(np.int64)
        fields = {f.name: v for f, v in zip(self.before.fields, before, strict=True)}
        if self.after.fields:
            there = held == size
            tail = np.where(there, start + size - self.after.bytes, 0)
            values = self.after.read(d.buffer, tail)
            values[:, ~there] = 0
            fields |= {f.name: v for f, v in zip(self.after.fields, values, strict=True)}
        end = size - self.after.bytes                       # of the frames, as sent
        cursor = np.full(len(rows), self.before.bytes, np.int64)
        number = self._number(fields, len(rows))
        alive = np.flatnonzero(number > 0)
        parts: list[AirFrames] = []
        slot = 0
        while len(alive):
            part, alive = self._frame(d, rows, start, held, end, cursor, fields, alive, slot)
            parts.append(part)
            slot += 1
            if not self.many:
                break
            alive = alive[(number[alive] > slot) & (cursor[alive] < end[alive])]
        if len(parts) == 1:
            return rows, parts[0]
        return rows, _in_order(parts, [f.name for g in (self.before, self.each, self.after) for f in g.fields])

    def _number(self, fields: dict[str, NDArray[np.int64]], n: int) -> NDArray[np.int64]:
        frames = self.wrapper.frames
        if isinstance(frames, str):
            return fields[frames]
        if frames is None:
            return np.full(n, np.iinfo(np.int64).max if self.many else 1, np.int64)
        return np.full(n, frames, np.int64)

    def _frame(self, d: Datagrams, rows: NDArray[np.int64], start: NDArray[np.int64], held: NDArray[np.int64],
               end: NDArray[np.int64], cursor: NDArray[np.int64], fields: dict[str, NDArray[np.int64]],
               alive: NDArray[np.int64], slot: int) -> tuple[AirFrames, NDArray[np.int64]]:
        """Return frame number ``slot`` of every datagram that has one, and which datagrams go on."""
        at = slice(None) if len(alive) == len(rows) else alive      # all of them: no copies
        own = {name: values[at] for name, values in fields.items()}
        begin, bytes_held, last = start[at], held[at], end[at]
        place = cursor[at]
        if self.each.fields:
            there = place + self.each.bytes <= np.minimum(bytes_held, last)
            values = self.each.read(d.buffer, np.where(there, begin + place, 0))
            values[:, ~there] = 0
            own |= {f.name: v for f, v in zip(self.each.fields, values, strict=True)}
            place = place + self.each.bytes
        announced = self.wrapper.frame_bytes
        if announced is None:
            sent = np.maximum(last - place, 0)
        elif isinstance(announced, int):
            sent = np.full(len(alive), announced, np.int64)
        else:
            sent = np.maximum(own[announced] + self.wrapper.frame_bytes_plus, 0)
        there_bytes = np.maximum(np.minimum(bytes_held, last) - place, 0)
        there_bytes = np.minimum(sent, there_bytes)
        frames = AirFrames(rows[at], np.full(len(alive), slot, np.int64), begin + place, there_bytes, sent,
                           there_bytes * self.wrapper.bits_per_byte, own)
        cursor[at] = place + sent
        return frames, alive[sent > 0] if self.many else alive


def _in_order(parts: Sequence[AirFrames], names: Sequence[str]) -> AirFrames:
    empty = np.zeros(0, np.int64)
    if not parts:
        return AirFrames(empty, empty, empty, empty, empty, empty, dict.fromkeys(names, empty))
    row = np.concatenate([p.row for p in parts])
    order = np.argsort(row, kind="stable")
    fields = {name: np.concatenate([p.fields[name] for p in parts]) for name in parts[0].fields}
    joined = AirFrames(row, np.concatenate([p.slot for p in parts]), np.concatenate([p.start for p in parts]),
                       np.concatenate([p.held for p in parts]), np.concatenate([p.sent for p in parts]),
                       np.concatenate([p.bits for p in parts]), fields)
    return joined.take(order)
