"""Frames that span datagrams: pieces of bit streams, in canonical order, to frames.

A stream is gathered until it breaks (a datagram is missing, or nothing came for a while) or is long enough,
and is then searched for frames; what stands behind the last whole frame is kept for the next search unless
the stream broke. Where a search ends depends on the stream alone, never on how captures were cut. Frames
are handed on in canonical order as soon as no earlier one can be found.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.chain import Outcome
from pcaptool.coding.step import LengthError
from pcaptool.frames.cut import Cut, Cutter, air_bits
from pcaptool.frames.keys import KeyMaker
from pcaptool.frames.make import ADDRESSES, Messages, Origin, TableMaker
from pcaptool.frames.table import CORRUPTED, NO_COUNTER, NO_KEY, FrameBatch
from pcaptool.profile import Profile

SILENCE = 60_000_000_000        # ns without a datagram that end a stream
LONGEST = 600_000_000_000       # ns of a stream that are searched at a time
MOST = 1 << 22                  # bits of a stream that are searched at a time
KEPT = 1 << 17                  # bits kept of a stream in which no frame was found
MARGIN = 4096                   # bits kept in front of what is new, so that decoders settle before it
NO_BITS = np.zeros(0, np.uint8)


@dataclass(slots=True)
class Piece:
    """A datagram's piece of a stream."""

    bits: NDArray[np.uint8]             # (bit,)
    doubt: NDArray[np.uint8]            # (bit,) or empty
    row: dict[str, Any]                 # its columns


@dataclass(slots=True)
class Stream:
    """What is gathered of one stream."""

    pieces: list[Piece] = field(default_factory=list)
    bits: int = 0
    done: int = 0               # frames that begin before this bit have been given out
    phase: int = 0              # bit from which the outer steps are undone


@dataclass(slots=True)
class Found:
    """Frames of one search, with the datagrams in which they ended."""

    rows: list[dict[str, Any]]
    size: NDArray[np.int64]
    outcome: Outcome


class StreamDecoder:
    """Takes datagrams of one profile in canonical order and gives frames in canonical order."""

    def __init__(self, profile: Profile) -> None:
        self.profile = profile
        self.maker = TableMaker(profile)
        self.by = KeyMaker(profile, profile.wrapper.stream_by or ADDRESSES)
        self.breaks = 0
        self._cutter = Cutter(profile.chain)
        self._period = max(int(np.lcm.reduce([step.period for step in self._cutter.outer] or [1])), 1)
        self._streams: dict[int, Stream] = {}
        self._gateways: dict[int, int] = {}         # the datagram counter that came last
        self._of_gateway: dict[int, set[int]] = {}
        self._found: list[Found] = []

    def add(self, columns: Mapping[str, NDArray[Any]]) -> tuple[FrameBatch, NDArray[np.int32]] | None:
        """Take datagrams; return (frames, capture of each) that nothing to come can precede."""
        wanted = [name for name in columns if name not in ("air",)]
        values = {name: columns[name].tolist() for name in wanted}
        keys = self.by.make(columns, len(columns["order"])).tolist()
        w = self.profile.wrapper
        last = 0
        for i, (key, air) in enumerate(zip(keys, columns["air"], strict=True)):
            row = {name: values[name][i] for name in wanted}
            last = row["order"]
            self._check_counter(row, key)
            stream = self._streams.setdefault(key, Stream())
            octets = np.frombuffer(air, np.uint8)
            bits, doubt = air_bits(octets, np.zeros(1, np.int64), len(octets), w.soft_bits, w.soft_one)
            if stream.pieces:
                if last - stream.pieces[-1].row["order"] > SILENCE:
                    self._search(stream, broken=True)
                elif stream.bits >= MOST or last - stream.pieces[0].row["order"] > LONGEST:
                    self._search(stream, broken=False)
            stream.pieces.append(Piece(bits[0], NO_BITS if doubt is None else doubt[0], row))
            stream.bits += bits.shape[1]
            if row["reason"]:                       # the snap length took the rest
                self._search(stream, broken=True)
                self.breaks += 1
        for stream in self._streams.values():
            if stream.pieces and last - stream.pieces[-1].row["order"] > SILENCE:
                self._search(stream, broken=True)
        waiting = [s.pieces[0].row["order"] for s in self._streams.values() if s.pieces]
        return self._ready(min(waiting, default=last))

    def rest(self) -> tuple[FrameBatch, NDArray[np.int32]] | None:
        """Search all that is left and return its frames."""
        for stream in self._streams.values():
            if stream.pieces:
                self._search(stream, broken=True)
        return self._ready(None)

    def _check_counter(self, row: dict[str, Any], key: int) -> None:
        """Break the streams of a gateway of which a datagram is missing."""
        backhaul = self.profile.backhaul
        if not backhaul:
            return
        gateway, count = row["backhaul_key"], row["backhaul"]
        before = self._gateways.get(gateway)
        self._gateways[gateway] = count
        members = self._of_gateway.setdefault(gateway, set())
        if before is not None and (count - before) % backhaul.modulo != 1:
            for member in members:
                if self._streams[member].pieces:
                    self._search(self._streams[member], broken=True)
                    self.breaks += 1
        members.add(key)

    def _search(self, stream: Stream, broken: bool) -> None:
        bits = np.concatenate([p.bits for p in stream.pieces])[None]
        doubt = None
        if len(stream.pieces[0].doubt):
            doubt = np.concatenate([p.doubt for p in stream.pieces])[None]
        context = {name: np.array([stream.pieces[0].row[f"wrapper.{name}"]]) for name in self.profile.chain.needs}
        cut, phase = self._best(bits, doubt, context, stream.phase)
        fresh = np.flatnonzero(cut.begin >= stream.done)
        ends = np.cumsum([len(p.bits) for p in stream.pieces])
        end = cut.begin + cut.size
        if len(fresh):
            datagram = np.searchsorted(ends, end[fresh] - 1, side="right")
            self._found.append(Found([stream.pieces[int(i)].row for i in datagram], cut.size[fresh],
                                     _taken(cut.outcome, fresh)))
        if broken:
            stream.pieces, stream.bits, stream.done, stream.phase = [], 0, 0, 0
            return
        past = int(end.max()) if len(end) else max(stream.bits - KEPT, stream.done)
        first = int(np.searchsorted(ends, max(past - MARGIN, 0), side="right"))
        dropped = int(ends[first - 1]) if first else 0
        stream.pieces = stream.pieces[first:]
        stream.bits -= dropped
        stream.done = past - dropped
        stream.phase = (phase - dropped) % self._period

    def _best(self, bits: NDArray[np.uint8], doubt: NDArray[np.uint8] | None, context: dict[str, NDArray[np.int64]],
              phase: int) -> tuple[Cut, int]:
        """Return the frames found from the phase that gives any, tried from the one that did last; and that phase."""
        best = None
        for k in range(self._period):
            begin = (phase + k) % self._period
            n = self._fitting(bits.shape[1] - begin)
            part = slice(begin, begin + n)
            cut = self._cutter.cut(np.ascontiguousarray(bits[:, part]),
                                   None if doubt is None else np.ascontiguousarray(doubt[:, part]), context)
            cut.begin += begin
            if best is None or len(cut.row) > len(best[0].row):
                best = cut, begin
            if k == 0 and len(cut.row) * int(cut.size.max(initial=0)) * 2 > bits.shape[1]:
                break                               # most of the stream is frames: this is the phase
        assert best is not None
        return best

    def _fitting(self, n: int) -> int:
        """Return the most bits, up to n, that the outer steps can undo."""
        for m in range(n, max(n - 4096, 0), -1):
            try:
                left = m
                for step in reversed(self._cutter.outer):
                    left = step.data_bits(left)
                return m
            except LengthError:
                continue
        return 0

    def _ready(self, bound: int | None) -> tuple[FrameBatch, NDArray[np.int32]] | None:
        """Return the frames that were ordered before a time, in canonical order."""
        batches: list[Found] = []
        later: list[Found] = []
        for found in self._found:
            early = np.array([bound is None or row["order"] < bound for row in found.rows])
            for keep, into in ((early, batches), (~early, later)):
                part = np.flatnonzero(keep)
                if len(part):
                    into.append(Found([found.rows[int(i)] for i in part], found.size[part],
                                      _taken(found.outcome, part)))
        self._found = later
        if not batches:
            return None
        rows = [row for found in batches for row in found.rows]
        n = len(rows)
        order = sorted(range(n), key=lambda i: (rows[i]["order"], rows[i]["capture"], rows[i]["packet"], i))
        rows = [rows[i] for i in order]
        place = np.empty(n, np.int64)
        place[order] = np.arange(n)
        message = Messages(n, self.maker.layout)
        sizes, first = np.zeros(n, np.int64), 0
        for found in batches:
            at = place[first : first + len(found.rows)]
            message.fill(at, found.outcome)
            sizes[at] = found.size
            first += len(found.rows)
        column = {name: np.array([row[name] for row in rows]) for name in rows[0]}
        slot = np.zeros(n, np.int16)
        same = (np.diff(column["packet"]) == 0) & (np.diff(column["capture"]) == 0)
        for i in np.flatnonzero(same):
            slot[i + 1] = slot[i] + 1
        origin = Origin(column["packet"], column["time"], column["order"], slot, np.zeros(n, np.int32),
                        np.zeros(n, np.uint64))
        frames = self.maker.make(
            origin, {name: v for name, v in column.items() if name.startswith("wrapper.")},
            {name: v for name, v in column.items() if name.startswith("carrier.")}, sizes, message)
        if self.maker.link.needs_message:           # no list of known links: a damaged key is not believed
            frames.key[frames.state >= CORRUPTED] = NO_KEY
        frames.backhaul[:] = NO_COUNTER             # counted by datagram
        return frames, column["capture"].astype(np.int32)


def _taken(outcome: Outcome, rows: NDArray[np.int64]) -> Outcome:
    """Return some rows of an outcome, ascending."""
    place = np.full(len(outcome.reason), -1, np.int64)
    place[rows] = np.arange(len(rows))
    of = place[outcome.error_frame]
    return Outcome(outcome.message[rows], outcome.length[rows], outcome.reason[rows], outcome.wrong_bits[rows],
                   outcome.headroom[rows], of[of >= 0], outcome.error_position[of >= 0])
