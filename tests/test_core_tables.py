"""Table declarations: what is checked before anything is written."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pyarrow.csv as pa_csv
import pyarrow.parquet as pq
import pytest

from circuitgen.core.run_tables import ALL_TABLES, dictionary_markdown
from circuitgen.core.tables import Column, Table, names_column

TABLE = Table(
    "trial",
    "trial row",
    (
        Column("cell_id", "int32", "number"),
        Column("depth_um", "float64", "depth"),
        Column("p_low", "float32", "bound", True),
        Column("cell_type", "name", "type"),
        Column("note", "text", "words"),
    ),
    ("cell_id",),
)


def _data(**changes):
    return {
        "cell_id": np.array([0, 1, 2]),
        "depth_um": np.array([1.5, 2.5, 0.1]),
        "p_low": np.array([0.25, np.nan, 0.5], np.float32),
        "cell_type": names_column(np.array([1, 0, 1]), ["spiny", "basket"]),
        "note": ["", "a, b", 'say "yes"'],
    } | changes


def test_parquet_keeps_types_nulls_and_names(tmp_path):
    path = tmp_path / "trial.parquet"
    TABLE.write_parquet(path, _data())
    table = pq.read_table(path)
    assert table.schema.equals(TABLE.schema)
    assert table["cell_id"].to_pylist() == [0, 1, 2]
    assert table["p_low"].to_pylist() == [0.25, None, 0.5]
    assert table["cell_type"].to_pylist() == ["basket", "spiny", "basket"]
    first = path.read_bytes()
    TABLE.write_parquet(path, _data())
    assert path.read_bytes() == first


def test_csv_writes_null_as_an_empty_field(tmp_path):
    path = tmp_path / "trial.csv"
    TABLE.write_csv(path, _data())
    lines = path.read_text().splitlines()
    assert lines[0] == '"cell_id","depth_um","p_low","cell_type","note"'
    assert lines[2].startswith("1,2.5,,")
    back = pa_csv.read_csv(path)
    assert back["note"].to_pylist() == ["", "a, b", 'say "yes"']
    assert back["cell_type"].to_pylist() == ["basket", "spiny", "basket"]


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"depth_um": np.array([1.0, np.nan, 2.0])}, "trial.depth_um has 1 nulls"),
        ({"cell_id": pa.array([1, None, None])}, "trial.cell_id has 2 nulls"),
        ({"extra": [1, 2, 3]}, "trial: columns"),
        ({"depth_um": [1.0]}, "length"),
        ({"cell_id": ["a", "b", "c"]}, "a"),
        ({"cell_id": np.array([0.5, 1.0, 2.0])}, "0.5"),
        ({"cell_id": np.array([0, 1, 2**31])}, "2147483648"),
    ],
)
def test_data_that_break_the_declaration_are_refused(tmp_path, changes, words):
    path = tmp_path / "trial.parquet"
    with pytest.raises((ValueError, pa.ArrowException), match=words):
        TABLE.write_parquet(path, _data(**changes))
    assert list(tmp_path.iterdir()) == []


def test_a_missing_column_is_refused():
    data = _data()
    del data["note"]
    with pytest.raises(ValueError, match="trial: columns"):
        TABLE.build(data)


def test_every_declared_table_is_sound():
    for table in ALL_TABLES:
        names = [column.name for column in table.columns]
        assert len(set(names)) == len(names)
        assert set(table.sort_key) <= set(names)
        assert not any(c.nullable for c in table.columns if c.name in table.sort_key)
        assert len(table.schema) == len(names)
        assert all(column.meaning for column in table.columns)


def test_the_dictionary_names_every_column_of_every_table():
    text = dictionary_markdown()
    sections = text.split("### ")[1:]
    assert len(sections) == len(ALL_TABLES)
    for table, section in zip(ALL_TABLES, sections, strict=True):
        for column in table.columns:
            assert f"| `{column.name}` | {column.dtype} |" in section
