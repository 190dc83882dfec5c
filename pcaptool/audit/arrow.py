"""numpy columns to arrow arrays, straight from their buffers.

pyarrow's own conversion asks whether a value is a pandas object and imports pandas to do so, which
costs a short run a tenth of a second.
"""

from collections.abc import Sequence
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

NUMPY_NAMES = {"float": "float32", "double": "float64"}


def arrow_array(values: NDArray[Any], missing: NDArray[np.bool_] | None = None,
                kind: pa.DataType | None = None) -> pa.Array:
    """Return an arrow array of one-dimensional numbers or truth values.

    missing  bool, True where there is no value
    kind     arrow type of the same width, where it is not the obvious one
    """
    n = len(values)
    nulls = 0 if missing is None else int(np.count_nonzero(missing))
    valid = pa.py_buffer(np.packbits(~missing, bitorder="little")) if nulls and missing is not None else None
    if values.dtype == np.bool_:
        data = pa.py_buffer(np.packbits(values, bitorder="little"))
        return pa.Array.from_buffers(pa.bool_(), n, [valid, data], nulls)
    data = pa.py_buffer(np.ascontiguousarray(values))
    return pa.Array.from_buffers(kind or pa.from_numpy_dtype(values.dtype), n, [valid, data], nulls)


def arrow_strings(words: Sequence[str]) -> pa.Array:
    """Return an arrow array of strings."""
    octets = [word.encode() for word in words]
    ends = np.cumsum([0, *(len(o) for o in octets)], dtype=np.int32)
    return pa.Array.from_buffers(pa.string(), len(octets), [None, pa.py_buffer(ends), pa.py_buffer(b"".join(octets))])


def numpy_column(array: pa.Array) -> NDArray[Any]:
    """Return an arrow array without missing values as numpy; truth values are unpacked, octets are objects."""
    if pa.types.is_binary(array.type):
        out = np.empty(len(array), object)
        out[:] = array.to_pylist()
        return out
    data = array.buffers()[1]
    if pa.types.is_boolean(array.type):
        bits = np.unpackbits(np.frombuffer(data, np.uint8), bitorder="little")
        return bits[array.offset : array.offset + len(array)].astype(np.bool_)
    kind = np.dtype(NUMPY_NAMES.get(str(array.type), str(array.type)))
    return np.frombuffer(data, kind, len(array), array.offset * kind.itemsize)
