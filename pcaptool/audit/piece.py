"""Decode one piece of a capture: the unit of work that goes to another process.

The frames go to a file beside (one per profile), in recorded order, with the numbers that the link
pass needs; only small totals travel back. A piece knows nothing of other pieces, so the result does
not depend on how many there are or who decodes them.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from pcaptool.audit.arrow import arrow_array
from pcaptool.capture import Account, Datagrams, OpenFragment, Piece, join_fragments, read_datagrams
from pcaptool.frames.decode import FrameDecoder
from pcaptool.frames.make import KIND, TableMaker
from pcaptool.frames.table import CORRUPTED, NO_KEY, FrameBatch
from pcaptool.links.numbering import Numbering
from pcaptool.profile import Profile

PLAIN = ("packet", "time", "order", "slot", "records", "digest", "state", "reason", "wrong_bits", "headroom",
         "air_bits", "counter", "key", "home", "backhaul", "backhaul_key")


@dataclass(frozen=True, slots=True)
class Job:
    """One piece to decode, or fragments left over at the ends of pieces."""

    piece: Piece | None
    profiles: tuple[Profile, ...]
    folder: Path
    name: str               # of the files in the folder
    open_fragments: tuple[OpenFragment, ...] = ()


@dataclass(slots=True)
class Part:
    """The frames of one profile from one piece, in a file."""

    profile: int
    path: Path
    frames: int = 0
    least_order: list[int] = field(default_factory=list)    # per batch in the file
    usable_keys: NDArray[np.uint64] = field(default_factory=lambda: np.zeros(0, np.uint64))
    hashed: dict[int, tuple[int, ...]] = field(default_factory=dict)

    @property
    def errors_path(self) -> Path:
        """The channel errors, one batch for each batch of frames, ``frame`` counted within it."""
        return self.path.with_suffix(".errors.arrow")


@dataclass(slots=True)
class PieceResult:
    account: Account
    parts: list[Part]
    claimed: int = 0        # records
    cut: int = 0
    udp: int = 0            # records that carried UDP datagrams
    checksum_bad: int = 0
    first_packet: int = 0
    begin_time: int = 0     # ns, of the first and the last record as recorded
    end_time: int = 0
    fragments: dict[str, list[OpenFragment]] = field(default_factory=dict)  # left over, by ledger entry


def decode_piece(job: Job, decoders: Sequence[FrameDecoder] | None = None) -> PieceResult:
    """Decode a piece with every profile; a datagram goes to the first profile that claims it."""
    decoders = decoders or [FrameDecoder(p) for p in job.profiles]
    writers = [_PartWriter(i, job.folder / f"{job.name}-{i}.arrow", d) for i, d in enumerate(decoders)]
    if job.piece is None:
        return _decode_fragments(job, decoders, writers)
    reader = read_datagrams(job.piece)
    result = PieceResult(reader.account, [w.part for w in writers], first_packet=job.piece.first_packet)
    for datagrams in reader:
        _decode(datagrams, decoders, writers, result)
    for writer in writers:
        writer.close()
    result.begin_time, result.end_time = reader.begin_time or 0, reader.end_time or 0
    return result


def _decode(datagrams: Datagrams, decoders: Sequence[FrameDecoder], writers: Sequence["_PartWriter"],
            result: PieceResult) -> NDArray[np.bool_]:
    """Decode a batch; return which datagrams a profile claims."""
    taken = np.zeros(len(datagrams), np.bool_)
    cut_records = 0
    for decoder, writer in zip(decoders, writers, strict=True):
        frames, cut = decoder.decode(datagrams, taken)
        cut_records += cut
        result.checksum_bad += frames.checksum_bad
        writer.add(frames)
    result.cut += cut_records
    result.claimed += int(datagrams.records[taken].sum()) - cut_records
    result.udp += int(datagrams.records.sum())
    return taken


def _decode_fragments(job: Job, decoders: Sequence[FrameDecoder], writers: Sequence["_PartWriter"]) -> PieceResult:
    """Decode datagrams whose fragments lie in several pieces; each fragment's entry is told."""
    datagrams, entries = join_fragments(job.open_fragments)
    result = PieceResult(Account(), [w.part for w in writers])
    taken = _decode(datagrams, decoders, writers, result)
    for writer in writers:
        writer.close()
    claimed = set(datagrams.packet[taken].tolist())
    joined = entries.pop("frames")
    complete = set(datagrams.packet.tolist())
    entries["frames"], entries["other_udp"], group = [], [], []
    for fragment in joined:
        group.append(fragment)
        if fragment.packet in complete:         # the last fragment of its datagram
            entries["frames" if fragment.packet in claimed else "other_udp"] += group
            group = []
    result.fragments = entries
    return result


class _PartWriter:
    def __init__(self, profile: int, path: Path, decoder: FrameDecoder) -> None:
        self.part = Part(profile, path)
        self._decoder = decoder
        self._writers: list[pa.RecordBatchWriter] = []
        self._sinks: list[pa.OSFile] = []
        self._keys = Numbering()

    def add(self, frames: FrameBatch) -> None:
        if not len(frames):
            return
        batches = (to_arrow(frames, self._decoder.profile, self._decoder.maker), pa.record_batch(
            [arrow_array(frames.error_frame), arrow_array(frames.error_position)], ["frame", "position"]))
        if not self._writers:
            for path, batch in zip((self.part.path, self.part.errors_path), batches, strict=True):
                self._sinks.append(pa.OSFile(str(path), "wb"))
                self._writers.append(pa.ipc.new_stream(self._sinks[-1], batch.schema))
        for writer, batch in zip(self._writers, batches, strict=True):
            writer.write_batch(batch)
        self.part.frames += len(frames)
        self.part.least_order.append(int(frames.order.min()))
        if self._decoder.maker.link.needs_message and frames.air is None:
            self._keys.number(frames.key[(frames.state < CORRUPTED) & (frames.key != NO_KEY)])

    def close(self) -> None:
        for closing in (*self._writers, *self._sinks):
            closing.close()
        self.part.usable_keys = np.array(self._keys.keys, np.uint64)
        self.part.hashed = dict(self._decoder.maker.link.seen)


def field_columns(profile: Profile) -> list[tuple[str, np.dtype[np.signedinteger]]]:
    """Return (column, smallest integer type) of the wrapper and message fields of a profile."""
    columns: list[tuple[str, np.dtype[np.signedinteger]]] = []
    for name, wrapped in profile.wrapper_fields.items():
        if wrapped.must_be is not None:
            continue            # the same in every datagram that is claimed
        columns.append((f"wrapper.{name}", integer_type(wrapped.bytes * 8)))
    if profile.message.kind:
        columns.append((KIND, np.dtype(np.int8)))
    widths: dict[str, int] = {}
    for spread in (profile.message.fields, *(k.fields for k in profile.message.kind)):
        for f in spread:
            if not f.name.startswith("_"):
                widths[f.name] = max(widths.get(f.name, 1), f.bits)
    return columns + [(name, integer_type(bits)) for name, bits in widths.items()]


def integer_type(bits: int) -> np.dtype[np.signedinteger]:
    """Return the smallest signed type that holds an unsigned value of so many bits (64: as is)."""
    return np.dtype(np.int16 if bits < 16 else np.int32 if bits < 32 else np.int64)


def to_arrow(frames: FrameBatch, profile: Profile, maker: TableMaker) -> pa.RecordBatch:
    """Return a batch as arrow columns: PLAIN but what the profile has no use for, then the fields.

    Behind each message field stands ``present:NAME``.
    """
    unused: tuple[str, ...] = () if maker.link.needs_message else ("home",)
    unused += () if maker.backhaul else ("backhaul", "backhaul_key")
    arrays, names = [], [name for name in PLAIN if name not in unused]
    for name in list(names):
        arrays.append(arrow_array(getattr(frames, name)))
    if frames.air is not None:          # pieces of a stream: payload, and what frames are told by later
        arrays.append(pa.array(frames.air, pa.binary()))
        names.append("air")
        for name, values in frames.fields.items():
            arrays.append(arrow_array(values))
            names.append(name)
        return pa.record_batch(arrays, names)
    for name, kind in field_columns(profile):
        arrays.append(arrow_array(frames.fields[name].astype(kind)))
        names.append(name)
        if is_message_field(name):
            there = frames.present.get(name)
            arrays.append(arrow_array(np.ones(len(frames), np.bool_) if there is None else there))
            names.append(f"present:{name}")
    return pa.record_batch(arrays, names)


def is_message_field(column: str) -> bool:
    """Return whether a field column may be missing in a usable frame (kinds, short messages)."""
    return not column.startswith("wrapper.") and column != KIND
