"""The frame table as CSV, for those who asked for it: from Parquet, row group by row group."""

import os
from pathlib import Path

import pyarrow as pa
import pyarrow.csv as pacsv
import pyarrow.parquet as pq

from pcaptool.table import defused


def frames_to_csv(parquet: Path, path: Path) -> None:
    """Write a frame table as CSV, row group by row group; the file appears whole or not at all."""
    beside = path.with_name(path.name + ".part")
    options = pacsv.WriteOptions(include_header=False, quoting_style="needed")
    try:
        with pq.ParquetFile(parquet) as source, open(beside, "wb") as sink:
            sink.write((",".join(source.schema_arrow.names) + "\n").encode())
            for group in range(source.num_row_groups):
                table = source.read_row_group(group)
                plain = pa.table({name: _plain(table.column(name)) for name in table.column_names})
                pacsv.write_csv(plain, sink, options)
        os.replace(beside, path)
    finally:
        beside.unlink(missing_ok=True)


def _plain(column: pa.ChunkedArray) -> pa.ChunkedArray:
    """Return a column as CSV shows it: labels as defused text, times as ISO 8601."""
    if pa.types.is_dictionary(column.type):
        chunks = []
        for chunk in column.chunks:
            words = pa.array([defused(w) for w in chunk.dictionary.to_pylist()], pa.string())
            chunks.append(pa.DictionaryArray.from_arrays(chunk.indices, words).cast(pa.string()))
        return pa.chunked_array(chunks, pa.string())
    if pa.types.is_timestamp(column.type):
        import pyarrow.compute as pc

        local = column.cast(pa.timestamp("ns"))        # needs no time zone database
        return pc.strftime(local, format="%Y-%m-%dT%H:%M:%SZ", locale="C")
    return column
