"""Tables as a published contract: columns, types, units, meaning and order of rows.

The data dictionary in DEVELOPERS.md is generated from these declarations, and every
table of a run folder is checked against its own before it is written.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as pa_csv
import pyarrow.parquet as pq

from circuitgen.core.files import whole_file

_ARROW_TYPES = {
    "int32": pa.int32(),
    "int64": pa.int64(),
    "float32": pa.float32(),
    "float64": pa.float64(),
    "bool": pa.bool_(),
    "text": pa.string(),
    "name": pa.dictionary(pa.int32(), pa.string()),
}


@dataclass(frozen=True)
class Column:
    """One column: its name (with the unit), type, meaning, and whether null is used."""

    name: str
    dtype: str
    meaning: str
    nullable: bool = False

    @property
    def arrow_type(self) -> pa.DataType:
        """The Arrow type that `dtype` stands for."""
        return _ARROW_TYPES[self.dtype]


@dataclass(frozen=True)
class Table:
    """One table of a run folder: what a row is, its columns, and its sort key."""

    name: str
    row: str
    columns: tuple[Column, ...]
    sort_key: tuple[str, ...]

    @property
    def schema(self) -> pa.Schema:
        """The Arrow schema of the table."""
        return pa.schema(
            pa.field(column.name, column.arrow_type, column.nullable)
            for column in self.columns
        )

    def build(self, data: Mapping[str, object]) -> pa.Table:
        """Return an Arrow table of `data`, checked against the declaration.

        Float columns declared nullable turn NaN into null; other NaN are refused.
        """
        names = [column.name for column in self.columns]
        if set(names) != set(data):
            raise ValueError(f"{self.name}: columns {sorted(data)} are not {names}")
        arrays = [_to_arrow(self, column, data[column.name]) for column in self.columns]
        return pa.Table.from_arrays(arrays, schema=self.schema)

    def write_parquet(self, path: Path, data: Mapping[str, object]) -> None:
        """Write `data` as one Parquet file, whole or not at all."""
        with whole_file(path) as partial:
            pq.write_table(self.build(data), partial, compression="zstd")

    def write_csv(self, path: Path, data: Mapping[str, object]) -> None:
        """Write `data` as one CSV file, whole or not at all; null is an empty field."""
        table = self.build(data)
        plain = pa.table(
            {
                column.name: table[column.name].cast(pa.string())
                if column.dtype == "name"
                else table[column.name]
                for column in self.columns
            }
        )
        with whole_file(path) as partial:
            pa_csv.write_csv(plain, partial)


def _to_arrow(table: Table, column: Column, values: object) -> pa.Array:
    if isinstance(values, pa.ChunkedArray):
        values = values.combine_chunks()
    if isinstance(values, pa.Array):
        array = values.cast(column.arrow_type)
    else:
        is_float = column.dtype.startswith("float")
        array = pa.array(values, type=column.arrow_type, from_pandas=is_float)
    if array.null_count and not column.nullable:
        raise ValueError(f"{table.name}.{column.name} has {array.null_count} nulls")
    return array


def names_column(codes: np.ndarray, names: Iterable[str]) -> pa.DictionaryArray:
    """Return a text column stored as integer codes into a list of names."""
    return pa.DictionaryArray.from_arrays(
        pa.array(np.asarray(codes, dtype=np.int32)), pa.array(list(names), pa.string())
    )
