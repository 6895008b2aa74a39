"""A finished run folder as the report reads it: tables, provenance, the spec's text."""

from __future__ import annotations

import json
import tempfile
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as pa_csv
import pyarrow.parquet as pq

from circuitgen.core.errors import RunFolderError
from circuitgen.core.run_tables import CURVES, FIT, PATHWAYS
from circuitgen.spec import read_document

_NEEDED = ("cells.parquet", "pairs.parquet", "edges.parquet", "synapses.parquet")
_NEEDED += ("pathways.csv", "fit.csv")


@dataclass(frozen=True)
class Cells:
    """The cells of a run; n cells, index = cell id.

    `type_index` counts through the spec's cell types.
    """

    type_index: np.ndarray
    morphology: list[str]
    position_um: np.ndarray
    depth_um: np.ndarray
    azimuth_deg: np.ndarray


class RunTables:
    """Reads the tables of one finished run folder, large ones piece by piece."""

    def __init__(self, path: Path):
        self.path = Path(path)
        try:
            text = (self.path / "provenance.json").read_text(encoding="utf-8")
            self.provenance = json.loads(text)
        except (OSError, ValueError):
            raise RunFolderError(
                f"{self.path} holds no finished run: circuitgen build makes one"
            ) from None
        absent = [name for name in _NEEDED if not (self.path / name).exists()]
        if absent:
            raise RunFolderError(
                f"{self.path} lacks {', '.join(absent)}; build the run again"
            )
        self.spec = _spec_fields(self.provenance["spec_text"])

    @cached_property
    def type_names(self) -> list[str]:
        """Names of the cell types, in the order of the spec."""
        return list(self.spec["cell_types"])

    @cached_property
    def is_excitatory(self) -> list[bool]:
        """Sign of each cell type."""
        entries = self.spec["cell_types"].values()
        return [entry["sign"] == "excitatory" for entry in entries]

    @cached_property
    def cells(self) -> Cells:
        """The table of cells."""
        table = pq.read_table(self.path / "cells.parquet")
        place = {name: index for index, name in enumerate(self.type_names)}
        types = table["cell_type"].cast(pa.string()).to_pylist()
        return Cells(
            np.array([place[name] for name in types], np.int64),
            table["morphology"].cast(pa.string()).to_pylist(),
            np.column_stack([table[f"{axis}_um"].to_numpy() for axis in "xyz"]),
            table["depth_um"].to_numpy(),
            table["azimuth_deg"].to_numpy(),
        )

    @cached_property
    def edges(self) -> dict[str, np.ndarray]:
        """The connections: pre and post cell, synapses, delay."""
        names = ["pre_cell_id", "post_cell_id", "synapses_n", "delay_ms"]
        table = pq.read_table(self.path / "edges.parquet", columns=names)
        return {name: table[name].to_numpy() for name in names}

    @cached_property
    def pathways(self) -> list[dict]:
        """Rows of pathways.csv."""
        return _csv_rows(self.path / "pathways.csv", PATHWAYS)

    @cached_property
    def recordings(self) -> list[dict]:
        """Rows of fit.csv."""
        return _csv_rows(self.path / "fit.csv", FIT)

    @cached_property
    def curves(self) -> list[dict]:
        """Rows of curves.csv."""
        return _csv_rows(self.path / "curves.csv", CURVES)

    @cached_property
    def wrap_um(self) -> tuple[float, float]:
        """Periods in x and y, 0 where the edge is open."""
        column = self.spec["column"]
        if column.get("edges") != "wrap":
            return 0.0, 0.0
        return float(column["width_um"]), float(column["length_um"])

    def batches(self, table: str, names: list[str]) -> Iterator[dict[str, np.ndarray]]:
        """Yield columns of a Parquet table, file or folder of parts, in order."""
        path = self.path / f"{table}.parquet"
        parts = sorted(path.glob("*.parquet")) if path.is_dir() else [path]
        for part in parts:
            with pq.ParquetFile(part) as file:
                for batch in file.iter_batches(1 << 20, columns=names):
                    yield {
                        name: batch[name].to_numpy(zero_copy_only=False)
                        for name in names
                    }

    def pathway_code(self, pre: np.ndarray, post: np.ndarray) -> np.ndarray:
        """Return presynaptic type x number of types + postsynaptic type."""
        types = self.cells.type_index
        return types[pre] * len(self.type_names) + types[post]


def _spec_fields(text: str) -> dict:
    """Return the fields of a spec that was checked when the run was built."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "spec.yaml"
        path.write_text(text, encoding="utf-8")
        return read_document(path).data


def _csv_rows(path: Path, table) -> list[dict]:
    """Read a CSV table of the run; an empty field of numbers is None."""
    text = [c.name for c in table.columns if c.dtype in ("text", "name")]
    options = pa_csv.ConvertOptions(column_types=dict.fromkeys(text, pa.string()))
    parsing = pa_csv.ParseOptions(newlines_in_values=True)
    try:
        read = pa_csv.read_csv(path, convert_options=options, parse_options=parsing)
    except pa.ArrowInvalid as error:
        if "Empty CSV" in str(error):  # a run without recordings
            return []
        raise
    return read.to_pylist()
