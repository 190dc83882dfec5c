"""Decoded messages to rows of the frame table: states, fields, keys, counters."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pcaptool.capture.datagrams import Datagrams
from pcaptool.coding.chain import BAD_FIELD, Outcome
from pcaptool.coding.step import OK, SHORT
from pcaptool.frames.fields import Layout, value_of
from pcaptool.frames.keys import MIX, KeyMaker
from pcaptool.frames.table import (
    CORRECTED,
    CORRUPTED,
    INTACT,
    NO_COUNTER,
    NO_KEY,
    STATE_SHORT,
    FrameBatch,
)
from pcaptool.profile import Profile

ADDRESSES = ("carrier.source", "carrier.destination")
KIND = "kind of message"       # column of the message kind, by its position in the profile


@dataclass(slots=True)
class Origin:
    """Where frames were recorded, as in FrameBatch: all arrays (frame,)."""

    packet: NDArray[np.int64]
    time: NDArray[np.int64]
    order: NDArray[np.int64]
    slot: NDArray[np.int16]
    records: NDArray[np.int32]
    digest: NDArray[np.uint64]


class Messages:
    """Decoded messages of a batch, filled group by group."""

    def __init__(self, n: int, layout: Layout) -> None:
        self.layout = layout
        self.words = np.zeros((n, max(layout.words, 1)), np.uint64)
        self.length = np.zeros(n, np.int64)
        self.reason = np.zeros(n, np.uint8)
        self.wrong_bits = np.full(n, -1, np.int32)
        self.headroom = np.full(n, np.nan, np.float32)
        self.error_frame = np.zeros(0, np.int64)
        self.error_position = np.zeros(0, np.int32)

    def prove(self, rows: NDArray[np.int64], words: NDArray[np.uint64], length: int, corrects: bool) -> None:
        whole = len(rows) == len(self.length)
        at = slice(None) if whole else rows
        self.words[at, : words.shape[1]] = words
        self.length[at] = length
        self.wrong_bits[at] = 0
        if corrects:
            self.headroom[at] = 1

    def fill(self, rows: NDArray[np.int64], outcome: Outcome) -> None:
        if self.layout.words:
            self.words[rows] = self.layout.gather(outcome.message)
        self.length[rows] = outcome.length
        self.reason[rows] = outcome.reason
        self.wrong_bits[rows] = outcome.wrong_bits
        self.headroom[rows] = outcome.headroom
        if len(outcome.error_frame):
            frame = np.concatenate([self.error_frame, rows[outcome.error_frame]])
            position = np.concatenate([self.error_position, outcome.error_position])
            order = np.argsort(frame, kind="stable")
            self.error_frame, self.error_position = frame[order], position[order]


class TableMaker:
    """Makes rows of the frame table of one profile."""

    def __init__(self, profile: Profile) -> None:
        self.profile = profile
        self.layout = Layout(profile)
        self.link = KeyMaker(profile, profile.link.by)
        self.backhaul = KeyMaker(profile, profile.backhaul.by) if profile.backhaul else None
        used = (*profile.link.by, *(profile.backhaul.by if profile.backhaul else ()), *profile.wrapper.stream_by)
        if profile.wrapper.carries == "stream" and not profile.wrapper.stream_by:
            used += ADDRESSES
        self._carriers = [reference for reference in ADDRESSES if reference in used]

    def carriers(self, d: Datagrams, row: NDArray[np.int64]) -> dict[str, NDArray[np.int64]]:
        """Return the addresses that keys are made of, as numbers: reference -> int64 (frame,)."""
        out = {}
        for reference in self._carriers:
            at = (d.source if reference == "carrier.source" else d.destination)[row]
            out[reference] = (at[:, 1] ^ (at[:, 0] * MIX)).astype(np.int64)
        return out

    def make(self, origin: Origin, fields: Mapping[str, NDArray[np.int64]], carriers: Mapping[str, NDArray[np.int64]],
             air_bits: NDArray[np.int64], message: Messages, checksum_bad: int = 0) -> FrameBatch:
        """Return frames as rows.

        fields    wrapper fields, "wrapper.NAME" -> int64 (frame,)
        air_bits  int64 (frame,) bits received on the air
        """
        n = len(origin.packet)
        fields = dict(fields)
        present: dict[str, NDArray[np.bool_]] = {}
        bad = np.zeros(n, np.bool_)
        values, kind_of = self._message_fields(message, present, bad)
        fields |= values
        if kind_of is not None:
            fields[KIND] = kind_of
        message.reason[(message.reason == OK) & bad] = BAD_FIELD
        usable = message.reason == OK
        wrong = np.where(usable, message.wrong_bits, -1).astype(np.int32)
        state = np.where(usable, np.where(wrong > 0, CORRECTED, INTACT), CORRUPTED).astype(np.uint8)
        state[message.reason == SHORT] = STATE_SHORT
        message.headroom[~usable] = np.nan
        columns = fields | dict(carriers)
        key = self.link.make(columns, n)
        for part in self.link.parts:
            if part.reference in present:
                key[~present[part.reference]] = NO_KEY
        if self.link.needs_message:
            key[message.reason == SHORT] = NO_KEY
        home = self.link.make(columns, n, message=False) if self.link.needs_message else key
        counter = np.full(n, NO_COUNTER, np.int64)
        if self.profile.counter:
            name = self.profile.counter.field
            there = usable & present.get(name, True)
            counter = np.where(there, columns[name], NO_COUNTER)
        backhaul = np.full(n, NO_COUNTER, np.int64)
        backhaul_key = np.zeros(n, np.uint64)
        if self.backhaul and self.profile.backhaul:
            backhaul = columns[self.profile.backhaul.counter]
            backhaul_key = self.backhaul.make(columns, n)
        keep = usable[message.error_frame]
        return FrameBatch(
            origin.packet, origin.time, origin.order, origin.slot, origin.records, origin.digest, state,
            message.reason, wrong, message.headroom, air_bits.astype(np.int32), counter, key,
            home, backhaul, backhaul_key, fields, present,
            message.error_frame[keep], message.error_position[keep], checksum_bad)

    def _message_fields(
        self, message: Messages, present: dict[str, NDArray[np.bool_]], bad: NDArray[np.bool_]
    ) -> tuple[dict[str, NDArray[np.int64]], NDArray[np.int64] | None]:
        """Return (raw values by name, message kind or None); note absent fields and bad fixed values."""
        short = message.length < max((p.last for p in self.layout.places), default=-1) + 1
        any_short = bool(short.any())
        values: dict[str, NDArray[np.int64]] = {}
        kind_of = None
        kinds = self.profile.message.kind
        common = [p for p in self.layout.places if p.kind < 0]
        for place in common:
            values[place.field.name] = value_of(message.words, place)
            if any_short:
                present[place.field.name] = message.length > place.last
        if kinds:
            kind_of = np.full(len(message.length), -1, np.int64)
            for index, kind in enumerate(kinds):
                fits = np.ones(len(kind_of), np.bool_)
                for name, value in kind.when.items():
                    fits &= values[name] == value
                kind_of[fits & (kind_of < 0)] = index
        for name, places in self.layout.by_name.items():
            if places[0].kind < 0:
                continue
            column = np.zeros(len(message.length), np.int64)
            there = np.zeros(len(message.length), np.bool_)
            for place in places:
                mine = (kind_of == place.kind) & (message.length > place.last)
                column = np.where(mine, value_of(message.words, place), column)
                there |= mine
            values[name], present[name] = column, there
        for place in self.layout.places:
            if place.field.must_be is not None:
                mine = message.length > place.last
                if place.kind >= 0:
                    mine &= kind_of == place.kind
                bad |= mine & (value_of(message.words, place) != place.field.must_be)
        return values, kind_of
