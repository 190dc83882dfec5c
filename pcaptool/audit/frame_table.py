"""The frame table on disk: from merged chunks to frames.parquet and errors.parquet."""

from collections.abc import Sequence
from concurrent.futures import Executor, Future
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from pcaptool.audit.arrow import arrow_array, arrow_strings, numpy_column
from pcaptool.audit.executor import beside
from pcaptool.audit.merge import Chunk
from pcaptool.audit.piece import field_columns, integer_type, is_message_field
from pcaptool.coding.chain import REASONS
from pcaptool.frames.make import KIND
from pcaptool.frames.table import ARRIVALS, CORRECTED, CORRUPTED, ERRORS, FRAMES, NO_COUNTER, STATES
from pcaptool.profile import Field, Profile, WrapperField
from pcaptool.table import Column

ROW_GROUP = 1 << 17
STATIC = ("capture", "profile", "state", "arrival", "reason")     # labels whose words are the same in every chunk
LABEL = pa.dictionary(pa.int32(), pa.string())
TYPES = {"label": LABEL, "timestamp": pa.timestamp("ns", "UTC")}
WHOLE = (pa.int64(), pa.int32(), pa.int16(), TYPES["timestamp"])


def arrow_type(column: Column) -> pa.DataType:
    """Return the arrow type of a documented column."""
    return TYPES.get(column.dtype) or pa.type_for_alias(column.dtype)


def columns_of(profiles: Sequence[Profile]) -> tuple[Column, ...]:
    """Return the documented columns of the frame table for some profiles."""
    columns = {c.name: c for c in FRAMES}
    for profile in profiles:
        for source, _ in field_columns(profile):
            name = output_name(source)
            if name not in columns:
                columns[name] = _field_column(profile, source, name)
    return tuple(columns.values())


def output_name(source: str) -> str:
    """Return the column of a field; a message field never hides a column of the table itself."""
    if source == KIND:
        return "kind_of_message"
    return f"message.{source}" if source in {c.name for c in FRAMES} else source


def _definition(profile: Profile, source: str) -> WrapperField | Field:
    if source.startswith("wrapper."):
        return profile.wrapper_fields[source.removeprefix("wrapper.")]
    return profile.message_fields[source]


def _field_column(profile: Profile, source: str, name: str) -> Column:
    if source == KIND:
        return Column(name, "label", "", "message kind; missing where none fits")
    field = _definition(profile, source)
    whole = np.dtype(integer_type(field.bits)).name
    dtype = "label" if field.names else "double" if field.scale != 1 or field.offset else whole
    return Column(name, dtype, field.unit, f"field {source} of profile {profile.name}")


class _RowGroups:
    """A Parquet file whose row groups have a fixed size, however the rows arrive.

    Encoding goes on beside this thread while the next rows are made ready.
    """

    def __init__(self, path: Path, schema: pa.Schema, size: int, thread: Executor, **options: Any) -> None:
        self._writer = pq.ParquetWriter(path, schema, **options)
        self._schema, self._size, self._thread = schema, size, thread
        self._waiting: list[pa.RecordBatch] = []
        self._rows = 0
        self._writing: Future[None] | None = None

    def add(self, batch: pa.RecordBatch) -> None:
        self._waiting.append(batch)
        self._rows += len(batch)
        if self._rows >= self._size:
            self._flush(self._rows // self._size * self._size)

    def close(self) -> None:
        self._flush(self._rows)
        if self._writing is not None:
            self._writing.result()
        self._writer.close()

    def _flush(self, rows: int) -> None:
        table = pa.Table.from_batches(self._waiting, self._schema)
        if self._writing is not None:
            self._writing.result()
        if rows:
            self._writing = self._thread.submit(self._write, table.slice(0, rows))
        self._waiting = table.slice(rows).to_batches()
        self._rows -= rows

    def _write(self, table: pa.Table) -> None:
        for at in range(0, len(table), self._size):
            self._writer.write_table(_canonical(table.slice(at, self._size)), self._size)


class FrameTable:
    """Takes merged chunks with their links and arrivals; without a folder it only counts them."""

    def __init__(self, folder: Path | None, profiles: Sequence[Profile], captures: Sequence[str],
                 jobs: int) -> None:
        self.columns = columns_of(profiles)
        self.schema = pa.schema([pa.field(c.name, arrow_type(c), not c.always) for c in self.columns])
        self.errors_schema = pa.schema([pa.field(c.name, arrow_type(c), not c.always) for c in ERRORS])
        self.profiles, self.captures = profiles, list(captures)
        self.rows = 0
        self._thread = beside(jobs)
        self._frames: _RowGroups | None = None
        self._errors: _RowGroups | None = None
        if folder is not None:
            labels = [c.name for c in self.columns if c.dtype == "label"]
            deltas = [f.name for f in self.schema if f.type in WHOLE]       # packed so, no compression gains more
            self._frames = _RowGroups(
                folder / "frames.parquet", self.schema, ROW_GROUP, self._thread, use_dictionary=labels,
                write_statistics=["time"], column_encoding=dict.fromkeys(deltas, "DELTA_BINARY_PACKED"),
                compression={n: "none" if n in deltas else "snappy" for n in self.schema.names})
            self._errors = _RowGroups(folder / "errors.parquet", self.errors_schema, 4 * ROW_GROUP, self._thread,
                                      use_dictionary=False, write_statistics=False)

    def add(self, profile: int, chunk: Chunk, who: NDArray[np.int64], arrival: NDArray[np.uint8],
            names: Sequence[str]) -> None:
        """Append a chunk; ``who`` numbers ``names``."""
        if len(chunk) and self._frames and self._errors:
            if len(chunk.error_frame):
                self._errors.add(pa.record_batch(
                    [arrow_array(chunk.error_frame + self.rows), arrow_array(chunk.error_position)],
                    self.errors_schema))
            self._frames.add(self._batch(profile, chunk, who, arrival, names))
        self.rows += len(chunk)

    def close(self) -> None:
        for writer in (self._frames, self._errors):
            if writer is not None:
                writer.close()
        self._thread.shutdown()

    def _batch(self, profile: int, chunk: Chunk, who: NDArray[np.int64], arrival: NDArray[np.uint8],
               names: Sequence[str]) -> pa.RecordBatch:
        c, n = chunk.columns, len(chunk)
        state = c["state"]
        unusable = state >= CORRUPTED
        any_unusable = bool(unusable.any())
        missing = unusable if any_unusable else None
        made: dict[str, pa.Array] = {
            "capture": _label(c["capture"], self.captures),
            "packet": arrow_array(c["packet"]),
            "slot": arrow_array(c["slot"]),
            "time": arrow_array(c["time"], None, TYPES["timestamp"]),
            "profile": _label(np.full(n, profile, np.int32), [p.name for p in self.profiles]),
            "link": _label(who, names),
            "counter": arrow_array(c["counter"], c["counter"] == NO_COUNTER),
            "state": _label(state, STATES),
            "arrival": _label(arrival, ARRIVALS, arrival == 0),
            "reason": _label(c["reason"], list(REASONS.values()), c["reason"] == 0),
            "verified": arrow_array(np.full(n, self.profiles[profile].chain.checks), state != CORRECTED),
            "wrong_bits": arrow_array(c["wrong_bits"], missing),
            "headroom": arrow_array(c["headroom"], np.isnan(c["headroom"])),
            "air_bits": arrow_array(c["air_bits"]),
        }
        for source, _ in field_columns(self.profiles[profile]):
            name = output_name(source)
            absent = ~c[f"present:{source}"] | unusable if is_message_field(source) else None
            if source == KIND:
                kinds = [k.name for k in self.profiles[profile].message.kind]
                made[name] = _label(c[source], kinds, unusable | (c[source] < 0))
            else:
                made[name] = _field_array(_definition(self.profiles[profile], source), c[source],
                                          absent, self.schema.field(name).type)
        arrays = [made[f.name] if f.name in made else pa.nulls(n, f.type) for f in self.schema]
        return pa.record_batch(arrays, self.schema)


def _canonical(table: pa.Table) -> pa.Table:
    """Return a row group in one piece, the words of each label sorted: bytes that only the rows decide."""
    columns = []
    for name in table.column_names:
        column = table.column(name)
        if name in STATIC:
            columns.append(column.combine_chunks())
        elif pa.types.is_dictionary(column.type):
            whole = column.unify_dictionaries().combine_chunks()
            columns.append(_sorted_label(whole if isinstance(whole, pa.DictionaryArray) else whole.chunk(0)))
        else:
            columns.append(column.combine_chunks())
    return pa.table(columns, table.schema)


def _sorted_label(label: pa.DictionaryArray) -> pa.DictionaryArray:
    words = label.dictionary.to_pylist()
    codes = numpy_column(label.indices)
    valid = label.buffers()[0]
    missing = None
    if label.null_count:
        bits = np.unpackbits(np.frombuffer(valid, np.uint8), bitorder="little")
        missing = bits[label.offset : label.offset + len(label)] == 0
        codes = np.where(missing, 0, codes)
    used = np.flatnonzero(np.bincount(codes, minlength=len(words))) if len(codes) else np.zeros(0, np.int64)
    order = sorted(used.tolist(), key=lambda i: words[i])
    place = np.zeros(max(len(words), 1), np.int32)
    place[order] = np.arange(len(order))
    return pa.DictionaryArray.from_arrays(arrow_array(place[codes], missing),
                                          arrow_strings([words[i] for i in order]), safe=False)


def _label(codes: NDArray[Any], words: Sequence[str], missing: NDArray[np.bool_] | None = None) -> pa.Array:
    indices = arrow_array(codes.astype(np.int32), missing)
    return pa.DictionaryArray.from_arrays(indices, arrow_strings(words), safe=False)


def _field_array(field: WrapperField | Field, raw: NDArray[Any], absent: NDArray[np.bool_] | None,
                 kind: pa.DataType) -> pa.Array:
    if pa.types.is_dictionary(kind):
        values, codes = np.unique(raw, return_inverse=True)
        return _label(codes, [field.names.get(int(v), str(v)) for v in values], absent)
    if pa.types.is_floating(kind):
        return arrow_array(raw * field.scale + field.offset, absent)
    return arrow_array(raw.astype(kind.to_pandas_dtype(), copy=False), absent)
