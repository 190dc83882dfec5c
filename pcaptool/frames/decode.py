"""Datagrams and a profile in, a frame table out.

Most frames of a healthy link are undamaged: they are proven so, cheaply and exactly, and only the
rest is decoded step by step. Both ways give the same table; which one a frame took cannot be seen.
"""

from collections import defaultdict

import numpy as np
from numpy.typing import NDArray

from pcaptool.capture import udp_checksum_ok
from pcaptool.capture.datagrams import Datagrams
from pcaptool.coding.chain import Outcome
from pcaptool.coding.proof import Proof, compile_proof, linear_from
from pcaptool.coding.step import SHORT
from pcaptool.frames.cut import Cutter, air_bits
from pcaptool.frames.digest import digest
from pcaptool.frames.make import Messages, Origin, TableMaker
from pcaptool.frames.table import NO_COUNTER, FrameBatch
from pcaptool.frames.wrapper import AirFrames, Unwrapper
from pcaptool.profile import Profile

WORTH_A_PROOF = 2000            # frames of one length before its proof is compiled
TABLE_BYTES = 96 << 20          # memory that the proofs of one profile may take
DECODE_ROWS = 8192              # frames decoded at a time ...
DECODE_BITS = 1 << 26           # ... of so many bits together
CUT_BITS = 1 << 23              # the same for air frames that hold several
WORTH_BYTES = 256               # longer frames: so many times WORTH_A_PROOF, as compiling takes longer


class FrameDecoder:
    """Decodes the datagrams of one profile; keeps compiled proofs from batch to batch."""

    def __init__(self, profile: Profile, *, proofs: bool = True) -> None:
        self.profile = profile
        self.chain = profile.chain
        self.unwrapper = Unwrapper(profile)
        self.maker = TableMaker(profile)
        self.layout = self.maker.layout
        self.cutter = Cutter(self.chain) if profile.wrapper.carries == "frames" else None
        self._inner = linear_from(self.chain)
        self._proofs: dict[tuple[int, ...], Proof | None] = {}
        self._seen: dict[tuple[int, ...], int] = defaultdict(int)
        checked = any(step.role in ("check", "code") for step in self.chain.steps[self._inner :])
        hard = proofs and checked and not profile.wrapper.soft_bits     # else there is nothing to prove
        self._table_bytes = 0 if hard else TABLE_BYTES

    def decode(self, d: Datagrams, taken: NDArray[np.bool_]) -> tuple[FrameBatch, int]:
        """Return (frames of the datagrams that the profile claims, records cut too short to tell).

        taken  bool (datagram,)  already spoken for; set for those claimed here
        """
        rows, cut = self.unwrapper.claim(d)
        rows, cut = rows[~taken[rows]], cut[~taken[cut]]
        rows, air = self.unwrapper.take_apart(d, rows)
        taken[rows] = True
        taken[cut] = True
        make = self._pieces if self.profile.wrapper.carries == "stream" else self._frames
        return make(d, rows, air), int(d.records[cut].sum())

    def _pieces(self, d: Datagrams, rows: NDArray[np.int64], air: AirFrames) -> FrameBatch:
        """Return pieces of streams as rows; StreamDecoder makes frames of them, in canonical order."""
        message = Messages(len(air.row), self.layout)
        message.length[:] = np.iinfo(np.int64).max
        message.reason[air.held < air.sent] = SHORT
        batch = self._table(d, rows, air, message)
        batch.counter[:] = NO_COUNTER
        batch.fields = {n: v for n, v in batch.fields.items() if n.startswith("wrapper.")}
        batch.fields |= self.maker.carriers(d, air.row)
        batch.present = {}
        batch.air = [bytes(d.buffer[a : a + n]) for a, n in zip(air.start.tolist(), air.held.tolist(), strict=True)]
        return batch

    def _frames(self, d: Datagrams, rows: NDArray[np.int64], air: AirFrames) -> FrameBatch:
        n = len(air.row)
        message = Messages(n, self.layout)
        enough = air.held >= air.sent
        message.reason[~enough | (air.held == 0)] = SHORT
        if self.cutter:
            air, message = self._cut(d, air, np.flatnonzero(message.reason != SHORT))
            return self._table(d, rows, air, message)
        context = {name: air.fields[name] for name in self.chain.needs}
        groups: list[NDArray[np.int64]] = [air.held, *context.values()]
        todo = np.flatnonzero(message.reason != SHORT)
        for key, members in _group(groups, todo):
            self._decode_group(d, air, members, key, message)
        return self._table(d, rows, air, message)

    def _air_bits(self, d: Datagrams, start: NDArray[np.int64], n_bytes: int
                  ) -> tuple[NDArray[np.uint8], NDArray[np.uint8] | None]:
        w = self.profile.wrapper
        return air_bits(d.buffer, start, n_bytes, w.soft_bits, w.soft_one)

    def _cut(self, d: Datagrams, air: AirFrames, whole: NDArray[np.int64]) -> tuple[AirFrames, Messages]:
        """Return the frames in air frames that hold several; an air frame without any is one that is short."""
        assert self.cutter
        cuts: list[tuple[NDArray[np.int64], Outcome]] = []
        sources: list[NDArray[np.int64]] = []
        begins: list[NDArray[np.int64]] = []
        sizes: list[NDArray[np.int64]] = []
        for key, members in _group([air.held], whole):
            step = _rows_at_once(key[0] * self.profile.wrapper.bits_per_byte, CUT_BITS)
            for at in range(0, len(members), step):
                part = members[at : at + step]
                bits, doubt = self._air_bits(d, air.start[part], key[0])
                cut = self.cutter.cut(bits, doubt, {name: air.fields[name][part] for name in self.chain.needs})
                first = sum(len(s) for s in sources)
                cuts.append((np.arange(first, first + len(cut.row)), cut.outcome))
                sources.append(part[cut.row])
                begins.append(cut.begin)
                sizes.append(cut.size)
        found = np.concatenate([np.zeros(0, np.int64), *sources])
        none = np.setdiff1d(np.arange(len(air.row)), found)
        source = np.concatenate([found, none])
        begin = np.concatenate([np.zeros(0, np.int64), *begins, np.zeros(len(none), np.int64)])
        size = np.concatenate([np.zeros(0, np.int64), *sizes, air.bits[none]])
        order = np.lexsort((begin, source))
        place = np.empty_like(order)
        place[order] = np.arange(len(order))
        message = Messages(len(order), self.layout)
        message.reason[:] = SHORT
        for rows, outcome in cuts:
            message.fill(place[rows], outcome)
        frames = air.take(source[order])
        frames.bits = size[order]
        new = np.flatnonzero(np.diff(frames.row, prepend=-1))
        frames.slot = np.arange(len(order)) - np.repeat(new, np.diff(np.append(new, len(order))))
        return frames, message

    def _decode_group(self, d: Datagrams, air: AirFrames, members: NDArray[np.int64], key: tuple[int, ...],
                      message: Messages) -> None:
        """Decode frames of one length and context."""
        proof = self._proof(key, len(members))
        if proof is not None:
            undamaged, data = proof.run(d.buffer, air.start[members])
            good, members = members[undamaged], members[~undamaged]
            if len(members):
                data = data[undamaged]
            if proof.inner == 0:
                message.prove(good, data[:, : proof.words], proof.width, self.chain.corrects)
            else:
                for at in range(0, len(good), DECODE_ROWS):
                    part = slice(at, at + DECODE_ROWS)
                    message.fill(good[part], self._decode_inner(proof, data[part], air, good[part]))
        step = _rows_at_once(key[0] * self.profile.wrapper.bits_per_byte, DECODE_BITS)
        for at in range(0, len(members), step):
            part_rows = members[at : at + step]
            bits, doubt = self._air_bits(d, air.start[part_rows], key[0])
            context = {name: air.fields[name][part_rows] for name in self.chain.needs}
            message.fill(part_rows, self.chain.decode(bits, None, context, doubt))

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

    def _table(self, d: Datagrams, rows: NDArray[np.int64], air: AirFrames, message: Messages) -> FrameBatch:
        hashes = digest(d.buffer, d.start, d.held, d.source, d.destination, d.source_port, d.destination_port,
                        d.ident, rows)
        if len(air.row) != len(rows) or self.unwrapper.many or self.cutter:
            hashes = hashes[np.searchsorted(rows, air.row)]
        origin = Origin(d.packet[air.row], d.time[air.row], d.order[air.row], air.slot.astype(np.int16),
                        np.where(air.slot == 0, d.records[air.row], 0).astype(np.int32), hashes)
        fields = {f"wrapper.{name}": values for name, values in air.fields.items()}
        return self.maker.make(origin, fields, self.maker.carriers(d, air.row), air.bits, message,
                               int((udp_checksum_ok(d, rows) == 0).sum()))


def _rows_at_once(bits: int, most: int) -> int:
    """Return how many frames of so many bits are decoded at a time."""
    return max(1, min(DECODE_ROWS, most // max(bits, 1)))


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
