"""The frame table as CSV, for those who asked for it: from Parquet, row group by row group."""

import os
from pathlib import Path

import pyarrow as pa
import pyarrow.csv as pacsv
import pyarrow.parquet as pq

from pcaptool.table import defused


def frames_to_csv(parquet: Path, path: Path) -> None:
    """Write a frame table as CSV, row group by row group."""
    beside = path.with_name(path.name + ".part")
    source = pq.ParquetFile(parquet)
    try:
        writer: pacsv.CSVWriter | None = None
        for group in range(max(source.num_row_groups, 1)):
            table = source.read_row_group(group) if source.num_row_groups else source.schema_arrow.empty_table()
            plain = pa.table({name: _plain(table.column(name)) for name in table.column_names})
            if writer is None:
                options = pacsv.WriteOptions(quoting_style="needed")
                writer = pacsv.CSVWriter(beside, plain.schema, write_options=options)
            writer.write_table(plain)
        if writer is not None:
            writer.close()
        os.replace(beside, path)
    finally:
        source.close()
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

        return pc.strftime(column, format="%Y-%m-%dT%H:%M:%SZ", locale="C")
    return column
