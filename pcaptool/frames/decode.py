"""Datagrams and a profile in, a frame table out.

Most frames of a healthy link are undamaged: they are proven so, cheaply and exactly, and only the
rest is decoded step by step. Both ways give the same table; which one a frame took cannot be seen.
"""

from collections import defaultdict

import numpy as np
from numpy.typing import NDArray

from pcaptool.capture import udp_checksum_ok
from pcaptool.capture.datagrams import Datagrams
from pcaptool.coding.bits import unpack_rows
from pcaptool.coding.chain import BAD_FIELD, Outcome
from pcaptool.coding.proof import Proof, compile_proof, linear_from
from pcaptool.coding.step import OK, SHORT
from pcaptool.frames.digest import digest
from pcaptool.frames.fields import Layout, value_of
from pcaptool.frames.keys import KeyMaker
from pcaptool.frames.table import (
    CORRECTED,
    CORRUPTED,
    INTACT,
    NO_COUNTER,
    NO_KEY,
    STATE_SHORT,
    FrameBatch,
)
from pcaptool.frames.wrapper import AirFrames, Unwrapper
from pcaptool.profile import Profile

KIND = "kind of message"       # column of the message kind, by its position in the profile
WORTH_A_PROOF = 2000            # frames of one length before its proof is compiled
TABLE_BYTES = 96 << 20          # memory that the proofs of one profile may take
DECODE_ROWS = 8192              # frames decoded at a time
WORTH_BYTES = 256               # longer frames: so many times WORTH_A_PROOF, as compiling takes longer


class FrameDecoder:
    """Decodes the datagrams of one profile; keeps compiled proofs from batch to batch."""

    def __init__(self, profile: Profile, *, proofs: bool = True) -> None:
        self.profile = profile
        self.chain = profile.chain
        self.unwrapper = Unwrapper(profile)
        self.layout = Layout(profile)
        self.link = KeyMaker(profile, profile.link.by)
        self.backhaul = KeyMaker(profile, profile.backhaul.by) if profile.backhaul else None
        self._inner = linear_from(self.chain)
        self._proofs: dict[tuple[int, ...], Proof | None] = {}
        self._seen: dict[tuple[int, ...], int] = defaultdict(int)
        self._table_bytes = 0 if proofs else TABLE_BYTES

    def decode(self, d: Datagrams, taken: NDArray[np.bool_]) -> tuple[FrameBatch, int]:
        """Return (frames of the datagrams that the profile claims, records cut too short to tell).

        taken  bool (datagram,)  already spoken for; set for those claimed here
        """
        rows, cut = self.unwrapper.claim(d)
        rows, cut = rows[~taken[rows]], cut[~taken[cut]]
        rows, air = self.unwrapper.take_apart(d, rows)
        taken[rows] = True
        taken[cut] = True
        return self._frames(d, rows, air), int(d.records[cut].sum())

    def _frames(self, d: Datagrams, rows: NDArray[np.int64], air: AirFrames) -> FrameBatch:
        n = len(air.row)
        message = _Messages(n, self.layout)
        enough = air.held >= air.sent
        message.reason[~enough | (air.held == 0)] = SHORT
        context = {name: air.fields[name] for name in self.chain.needs}
        groups: list[NDArray[np.int64]] = [air.held, *context.values()]
        todo = np.flatnonzero(message.reason != SHORT)
        for key, members in _group(groups, todo):
            self._decode_group(d, air, members, key, message)
        return self._table(d, rows, air, message)

    def _decode_group(self, d: Datagrams, air: AirFrames, members: NDArray[np.int64], key: tuple[int, ...],
                      message: "_Messages") -> None:
        """Decode frames of one length and context."""
        proof = self._proof(key, len(members))
        if proof is not None:
            undamaged, data = proof.run(d.buffer, air.start[members])
            good, members = members[undamaged], members[~undamaged]
            data = data[undamaged]
            if proof.inner == 0:
                message.prove(good, data[:, : proof.words], proof.width, self.chain.corrects)
            else:
                for at in range(0, len(good), DECODE_ROWS):
                    part = slice(at, at + DECODE_ROWS)
                    message.fill(good[part], self._decode_inner(proof, data[part], air, good[part]))
        for at in range(0, len(members), DECODE_ROWS):
            part_rows = members[at : at + DECODE_ROWS]
            bits = unpack_rows(d.buffer, air.start[part_rows], key[0])
            context = {name: air.fields[name][part_rows] for name in self.chain.needs}
            message.fill(part_rows, self.chain.decode(bits, None, context))

    def _decode_inner(self, proof: Proof, data: NDArray[np.uint64], air: AirFrames,
                      rows: NDArray[np.int64]) -> Outcome:
        """Decode the steps inside a proof, which are not linear; the air itself is undamaged."""
        context = {name: air.fields[name][rows] for name in self.chain.needs}
        outcome = type(self.chain)(self.chain.steps[: proof.inner]).decode(proof.data_bits(data), None, context)
        if self.chain.corrects:
            outcome.headroom = np.where(np.isnan(outcome.headroom), np.float32(1), outcome.headroom)
        damaged = outcome.wrong_bits > 0
        if damaged.any():       # an inner step repaired something: positions must be those on the air
            bits = proof.data_bits(data)[damaged]
            for step in self.chain.steps[proof.inner :]:
                bits = step.encode(bits, {k: v[damaged] for k, v in context.items()})
            again = self.chain.decode(bits, None, {k: v[damaged] for k, v in context.items()})
            place = np.flatnonzero(damaged)
            outcome.wrong_bits[place] = again.wrong_bits
            outcome.error_frame, outcome.error_position = place[again.error_frame], again.error_position
        return outcome

    def _proof(self, key: tuple[int, ...], members: int) -> Proof | None:
        self._seen[key] += members
        if key not in self._proofs:
            if self._seen[key] < WORTH_A_PROOF * max(1, key[0] // WORTH_BYTES) or self._table_bytes >= TABLE_BYTES:
                return None
            wanted = self.layout.wanted if self._inner == 0 else None
            context = dict(zip(self.chain.needs, key[1:], strict=True))
            proof = compile_proof(self.chain, key[0], wanted, context)
            self._proofs[key] = proof
            self._table_bytes += proof.nbytes if proof else 0
        return self._proofs[key]

    def _table(self, d: Datagrams, rows: NDArray[np.int64], air: AirFrames, message: "_Messages") -> FrameBatch:
        n = len(air.row)
        fields = {f"wrapper.{name}": values for name, values in air.fields.items()}
        carrier = {"carrier.source": d.source, "carrier.destination": d.destination}
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
        columns = dict(fields)
        for reference, address in carrier.items():
            if any(reference == p.reference for m in (self.link, self.backhaul) if m for p in m.parts):
                at = address[air.row]
                columns[reference] = (at[:, 1] ^ (at[:, 0] * np.uint64(0x9E3779B97F4A7C15))).astype(np.int64)
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
        hashes = digest(d.buffer, d.start, d.held, d.source, d.destination, d.source_port, d.destination_port,
                        d.ident, rows)
        if len(air.row) != len(rows) or self.unwrapper.many:
            hashes = hashes[np.searchsorted(rows, air.row)]
        keep = usable[message.error_frame]
        return FrameBatch(
            d.packet[air.row], d.time[air.row], d.order[air.row], air.slot.astype(np.int16),
            np.where(air.slot == 0, d.records[air.row], 0).astype(np.int32), hashes, state,
            message.reason, wrong, message.headroom, (air.held * 8).astype(np.int32), counter, key,
            home, backhaul, backhaul_key, fields, present,
            message.error_frame[keep], message.error_position[keep],
            int((udp_checksum_ok(d, rows) == 0).sum()),
        )

    def _message_fields(
        self, message: "_Messages", present: dict[str, NDArray[np.bool_]], bad: NDArray[np.bool_]
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


class _Messages:
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


def _group(
    columns: list[NDArray[np.int64]], rows: NDArray[np.int64]
) -> list[tuple[tuple[int, ...], NDArray[np.int64]]]:
    """Return (values, rows) for every combination of values found in the rows."""
    groups: list[tuple[tuple[int, ...], NDArray[np.int64]]] = [((), rows)]
    for column in columns:
        finer = []
        for values, members in groups:
            mine = column[members]
            if len(mine) and (mine == mine[0]).all():
                finer.append(((*values, int(mine[0])), members))
                continue
            for value in np.unique(mine):
                finer.append(((*values, int(value)), members[mine == value]))
        groups = finer
    return groups
