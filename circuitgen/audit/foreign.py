"""Circuits from elsewhere: cells and connections as CSV or Parquet tables."""

from __future__ import annotations

import csv
import re
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pa_csv
import pyarrow.parquet as pq

from circuitgen.audit.circuit import AuditCircuit, make_cells
from circuitgen.core.errors import InputError, Problem, nearest_name

NEEDED = {"cells": ("cell_id", "cell_type"), "edges": ("pre_cell_id", "post_cell_id")}
PLACES = ("x_um", "y_um", "z_um")
KNOWN = (*NEEDED["cells"], *PLACES, *NEEDED["edges"], "synapses_n")


def read_mapping(text: str | None) -> dict[str, str]:
    """Read ``ours=theirs,...``; InputError names what is no column of ours."""
    mapping, problems = {}, []
    for part in (text or "").split(","):
        if not part.strip():
            continue
        ours, equals, theirs = (word.strip() for word in part.partition("="))
        if not equals or not theirs:
            rule = f"= {part.strip()!r} must be OURS=THEIRS"
            problems.append(Problem("audit", None, "--columns", rule))
        elif ours not in KNOWN:
            rule = f"= {ours!r} is no column that an audit reads"
            nearest = nearest_name(ours, KNOWN)
            problems.append(Problem("audit", None, "--columns", rule, nearest))
        else:
            mapping[ours] = theirs
    if problems:
        raise InputError(problems)
    return mapping


def _read_table(path: Path, wanted: dict[str, str], optional: set[str]) -> pa.Table:
    """Read the wanted columns (ours: theirs) of a CSV or Parquet file, renamed."""
    try:
        if path.suffix == ".parquet" or path.is_dir():
            names = pq.ParquetDataset(path).schema.names
        else:
            with path.open(encoding="utf-8-sig", newline="") as stream:
                names = next(csv.reader(stream), [])
    except (OSError, UnicodeDecodeError, pa.ArrowInvalid) as error:
        rule = f"cannot be read: {str(error).splitlines()[0]}"
        raise InputError([Problem(str(path), None, "", rule)]) from None
    missing = [
        Problem(str(path), 1, theirs, "column is missing", nearest_name(theirs, names))
        for ours, theirs in wanted.items()
        if theirs not in names and ours not in optional
    ]
    if missing:
        raise InputError(missing)
    present = {ours: theirs for ours, theirs in wanted.items() if theirs in names}
    if path.suffix == ".parquet" or path.is_dir():
        table = pq.read_table(path, columns=list(present.values()))
    else:
        table = _read_csv(path, list(present.values()))
    return table.select(list(present.values())).rename_columns(list(present))


def _read_csv(path: Path, columns: list[str]) -> pa.Table:
    """Read columns as text (ids may be any); a broken row is named by its line."""
    options = pa_csv.ConvertOptions(
        include_columns=columns, column_types=dict.fromkeys(columns, pa.string())
    )
    try:
        return pa_csv.read_csv(path, convert_options=options)
    except pa.ArrowInvalid:
        pass
    try:
        # Only one thread knows which row it is at.
        one_thread = pa_csv.ReadOptions(use_threads=False)
        return pa_csv.read_csv(path, one_thread, convert_options=options)
    except pa.ArrowInvalid as error:
        found = re.search(r"Row #(\d+): (.*)", str(error))
        line, words = (int(found[1]), found[2]) if found else (None, str(error))
        rule = f"is broken: {words.splitlines()[0]}"
        raise InputError([Problem(str(path), line, "", rule)]) from None


def _numbers(table: pa.Table, name: str, path: Path, theirs: str, kind) -> np.ndarray:
    """Return a column as numbers; the first cell that is none is named by its line."""
    column = table[name].combine_chunks()
    try:
        return column.cast(kind).to_numpy(zero_copy_only=False)
    except pa.ArrowInvalid:
        texts = column.cast(pa.string()).to_pylist()
        number = int if pa.types.is_integer(kind) else float
        for place, text in enumerate(texts):
            try:
                number(text)
            except (TypeError, ValueError):
                word = "a whole number" if number is int else "a number"
                rule = f"= {text!r} must be {word}"
                raise InputError([Problem(str(path), place + 2, theirs, rule)]) from None
        raise


def _text(column: pa.ChunkedArray) -> pa.Array:
    if pa.types.is_dictionary(column.type):
        column = column.cast(column.type.value_type)
    return column.cast(pa.string()).combine_chunks()


def _cells(path: Path, mapping: Mapping[str, str]):
    """Return ids, type names, type of every cell, positions (NaN if unknown)."""
    names = (*NEEDED["cells"], *PLACES)
    wanted = {name: mapping.get(name, name) for name in names}
    table = _read_table(path, wanted, set(PLACES) - set(mapping))
    ids = _text(table["cell_id"])
    repeated = pc.value_counts(ids)
    twice = repeated.filter(pc.greater(repeated.field("counts"), 1))
    problems = [
        Problem(
            str(path), None, wanted["cell_id"], f"= {entry['values']!r} stands twice"
        )
        for entry in twice.slice(0, 10).to_pylist()
    ]
    if ids.null_count or table["cell_type"].null_count:
        problems.append(Problem(str(path), None, "", "has cells without id or type"))
    if problems:
        raise InputError(problems)
    kinds = _text(table["cell_type"]).dictionary_encode()
    position = np.full((table.num_rows, 3), np.nan)
    if all(name in table.column_names for name in PLACES):
        for axis, name in enumerate(PLACES):
            position[:, axis] = _numbers(table, name, path, wanted[name], pa.float64())
    return ids, kinds, position


def _edges(path: Path, mapping: Mapping[str, str], ids: pa.Array):
    """Return sorted (pre, post, synapses or None) as cell numbers, each pair once."""
    names = (*NEEDED["edges"], "synapses_n")
    wanted = {name: mapping.get(name, name) for name in names}
    table = _read_table(path, wanted, {"synapses_n"} - set(mapping))
    ends, problems = [], []
    for name in NEEDED["edges"]:
        found = pc.index_in(_text(table[name]), ids)
        if found.null_count:
            place = int(pc.index(pc.is_null(found), True).as_py())
            value = table[name][place].as_py()
            rule = f"= {value!r} is in no row of the cells"
            problems.append(Problem(str(path), place + 2, wanted[name], rule))
        ends.append(found.to_numpy(zero_copy_only=False))
    if problems:
        raise InputError(problems)
    synapses = None
    if "synapses_n" in table.column_names:
        synapses = _numbers(table, "synapses_n", path, wanted["synapses_n"], pa.int64())
        if synapses.size and synapses.min() < 1:
            place = int((synapses < 1).argmax())
            rule = f"= {synapses[place]} must be >= 1"
            raise InputError([Problem(str(path), place + 2, wanted["synapses_n"], rule)])
    return _joined(*(end.astype(np.int64) for end in ends), synapses, len(ids))


def _joined(pre, post, synapses, cells_n: int):
    """Sort connections; rows of the same pair are its synapses, added up."""
    key = pre * cells_n + post
    key = np.where(pre == post, -1, key)
    order = np.argsort(key, kind="stable")
    order = order[np.searchsorted(key[order], 0) :]
    found, first = np.unique(key[order], return_index=True)
    many = found.size < order.size
    if synapses is None and many:
        # One row per synapse: counting the rows of a pair counts its synapses.
        synapses = np.ones(key.size, np.int64)
    if synapses is not None and found.size:
        synapses = np.add.reduceat(synapses[order], first)
    pre, post = np.divmod(found, cells_n)
    return pre.astype(np.int32), post.astype(np.int32), synapses


def read_foreign(
    cells: Path,
    edges: Path,
    mapping: Mapping[str, str],
    groups: dict[str, tuple[str, ...]],
) -> AuditCircuit:
    """Read a circuit from a table of cells and one of connections.

    Parameters
    ----------
    cells, edges : Path
        CSV or Parquet. Cells: ``cell_id, cell_type`` and, if known, ``x_um, y_um,
        z_um``. Edges: ``pre_cell_id, post_cell_id`` and, if known, ``synapses_n``;
        several rows of one pair are its synapses. Connections of a cell with itself
        are left out.
    mapping : mapping of our names of columns to theirs
    groups : dict of str to tuple of str
        Cell types by name of a group.

    Raises
    ------
    InputError
        For missing columns, ids that are in no row of the cells, broken numbers.
    """
    ids, kinds, position = _cells(Path(cells), mapping)
    pre, post, synapses = _edges(Path(edges), mapping, ids)
    return AuditCircuit(
        tuple(kinds.dictionary.to_pylist()),
        make_cells(kinds.indices.to_numpy(), position),
        pre,
        post,
        synapses,
        (0.0, 0.0),
        groups,
    )
