"""Columns of the tables that pass between layers and reach the user, written once as data."""

from typing import NamedTuple


class Column(NamedTuple):
    """One documented column.

    dtype  a pyarrow type name (``int64``, ``string``, ``bool``, ``double`` ...), or ``label``:
           a dictionary-encoded string of few distinct values
    unit   empty for a count or a name
    """

    name: str
    dtype: str
    unit: str
    meaning: str
