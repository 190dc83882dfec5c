"""Bring the frames of many pieces into canonical order: by time, then capture, packet and slot.

Pieces of one capture follow each other; captures of two recorders overlap; a multi-queue adapter
leaves records slightly out of order. Each piece says for each of its batches the least time in it, so
that frames can be handed on as soon as nothing earlier can come, with only the overlap in memory.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from pcaptool.audit.arrow import numpy_column
from pcaptool.audit.piece import Part

Columns = dict[str, NDArray[Any]]
EARLIEST, LAST = np.iinfo(np.int64).min, np.iinfo(np.int64).max


@dataclass(slots=True)
class Source:
    """A part with what places it: its capture (-1: in the packet's upper bits), rank and time shift."""

    part: Part
    capture: int
    rank: int           # of pieces, in canonical order; -1: fragments from several pieces, to be read first
    shift: int      # ns to add to order


@dataclass(slots=True)
class Chunk:
    """Frames in canonical order; errors refer to rows of the chunk, ascending."""

    columns: Columns
    error_frame: NDArray[np.int64]
    error_position: NDArray[np.int32]

    def __len__(self) -> int:
        return len(self.columns["packet"])

    def take(self, rows: NDArray[np.int64]) -> "Chunk":
        """Return some rows in the order given."""
        place = np.full(len(self), -1, np.int64)
        place[rows] = np.arange(len(rows))
        frame = place[self.error_frame]
        kept = np.flatnonzero(frame >= 0)
        kept = kept[np.argsort(frame[kept], kind="stable")]
        return Chunk({n: v[rows] for n, v in self.columns.items()}, frame[kept], self.error_position[kept])


def _shifted(order: NDArray[np.int64], shift: int) -> NDArray[np.int64]:
    """Return later times; a hostile file's steps end at the last time there is."""
    return np.minimum(order, LAST - 1 - shift) + shift


class _Stream:
    """The batches of one source, with the least order of those not yet read."""

    def __init__(self, source: Source) -> None:
        self.source = source
        least = _shifted(np.array(source.part.least_order, np.int64), source.shift)
        self._least = [*np.minimum.accumulate(least[::-1])[::-1].tolist(), LAST]
        self._next = 0
        self._readers: list[Iterator[pa.RecordBatch]] = []
        self._files: list[pa.OSFile] = []

    @property
    def least(self) -> int:
        return int(self._least[self._next])

    def read(self) -> Chunk:
        if not self._readers:
            paths = (self.source.part.path, self.source.part.errors_path)
            self._files = [pa.OSFile(str(path)) for path in paths]
            self._readers = [iter(pa.ipc.open_stream(file)) for file in self._files]
        frames, errors = (next(r) for r in self._readers)
        self._next += 1
        if self.least == LAST:          # read to the end: the disk is free for others
            for file in self._files:
                file.close()
            self.source.part.path.unlink()
            self.source.part.errors_path.unlink()
        columns: Columns = {
            name: numpy_column(values)
            for name, values in zip(frames.schema.names, frames.columns, strict=True)
        }
        n = frames.num_rows
        if self.source.shift:
            columns["order"] = _shifted(columns["order"], self.source.shift)
        if self.source.capture >= 0:
            columns["capture"] = np.full(n, self.source.capture, np.int32)
        else:
            columns["capture"] = (columns["packet"] >> 40).astype(np.int32)
            columns["packet"] = columns["packet"] & ((1 << 40) - 1)
        columns["rank"] = np.full(n, self.source.rank, np.int32)
        return Chunk(columns, numpy_column(errors.column(0)), numpy_column(errors.column(1)))


def chunk_of(batch: pa.RecordBatch, capture: NDArray[np.int32], error_frame: NDArray[np.int64],
             error_position: NDArray[np.int32]) -> Chunk:
    """Return frames that come from no file, in canonical order already."""
    columns: Columns = {n: numpy_column(v) for n, v in zip(batch.schema.names, batch.columns, strict=True)}
    return Chunk(columns | {"capture": capture}, error_frame, error_position)


class Supply(Protocol):
    """Where sources come from: those taken over already, and those still pending."""

    sources: list[Source]

    @property
    def bound(self) -> int: ...

    def take_over(self) -> list[Source]: ...


def merge(profile: int, supply: Supply) -> Iterator[Chunk]:
    """Yield all frames of a profile in canonical order; pending sources are taken over when needed."""
    streams = [_Stream(s) for s in supply.sources if s.part.profile == profile and s.part.frames]
    pool: list[Chunk] = []
    while streams or supply.bound != LAST:
        first = min(streams, key=lambda s: (s.least, s.source.rank), default=None)
        if supply.bound != LAST and (first is None or supply.bound <= first.least):
            fresh = supply.take_over()
            streams += [_Stream(s) for s in fresh if s.part.profile == profile and s.part.frames]
            continue
        assert first is not None
        pool.append(first.read())
        streams = [s for s in streams if s.least != LAST]
        unread = [(s.least, s.source.rank) for s in streams]
        bound, bound_rank = min([*unread, (supply.bound, -1)])
        ready, pool = _ready(pool, bound, bound_rank)
        if ready is not None:
            yield ready
    if pool:
        yield _ready(pool, LAST, -1)[0] or pool[0]


def _ready(pool: list[Chunk], bound: int, bound_rank: int) -> tuple[Chunk | None, list[Chunk]]:
    """Return the frames that nothing unread can precede, sorted, and the pool of the others."""
    whole = pool[0] if len(pool) == 1 else _joined(pool)
    order, rank = whole.columns["order"], whole.columns["rank"]
    if len(pool) > 1 or (order[1:] < order[:-1]).any():
        by = (whole.columns["slot"], whole.columns["packet"], whole.columns["capture"], order)
        whole = whole.take(np.lexsort(by))
        order, rank = whole.columns["order"], whole.columns["rank"]
    if int(order[-1]) < bound:
        return whole, []
    free = (order < bound) | ((order == bound) & (rank <= bound_rank))
    n = int(np.argmin(free)) if not free.all() else len(free)
    if n == len(whole):
        return whole, []
    rest = whole.take(np.arange(n, len(whole)))
    return (whole.take(np.arange(n)) if n else None), [rest]


def _joined(chunks: Sequence[Chunk]) -> Chunk:
    first = np.cumsum([0, *(len(c) for c in chunks)])
    return Chunk(
        {n: np.concatenate([c.columns[n] for c in chunks]) for n in chunks[0].columns},
        np.concatenate([c.error_frame + f for c, f in zip(chunks, first, strict=False)]),
        np.concatenate([c.error_position for c in chunks]),
    )
