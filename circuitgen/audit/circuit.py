"""A circuit under audit, ours or anyone's: cells with types, connections."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq

from circuitgen.column import Cells
from circuitgen.run import read_provenance


@dataclass(frozen=True)
class AuditCircuit:
    """Cells 0 .. n - 1 and the connections between them, sorted by (pre, post).

    Attributes
    ----------
    type_names : tuple of str
    cells : Cells
        Layers, reconstructions and azimuths are not looked at. Positions are NaN
        where they are unknown.
    pre, post : int32 (connections,)
    synapses_n : int32 (connections,) or None
        Synapses of each connection, where known.
    wrap_um : (float, float)
        Periods in x and y, 0 where the edge is open.
    groups : dict of str to tuple of str
        Cell types by name of a group.
    """

    type_names: tuple[str, ...]
    cells: Cells
    pre: np.ndarray
    post: np.ndarray
    synapses_n: np.ndarray | None
    wrap_um: tuple[float, float]
    groups: dict[str, tuple[str, ...]]

    @property
    def has_positions(self) -> bool:
        """Whether all somata have places."""
        return bool(np.isfinite(self.cells.position_um).all())

    def members(self, name: str) -> tuple[int, ...]:
        """Return the indices of the types that a type's or group's name means."""
        names = self.groups.get(name, (name,))
        return tuple(self.type_names.index(member) for member in names)

    @cached_property
    def keys(self) -> np.ndarray:
        """Connections as pre x cells + post, increasing."""
        return self.pre.astype(np.int64) * self.cells.cells_n + self.post

    def connected(self, pre: np.ndarray, post: np.ndarray) -> np.ndarray:
        """Tell which ordered pairs of cells are connected."""
        if not self.keys.size:
            return np.zeros(len(pre), bool)
        key = np.asarray(pre, np.int64) * self.cells.cells_n + post
        place = np.minimum(np.searchsorted(self.keys, key), self.keys.size - 1)
        return self.keys[place] == key


def make_cells(type_index: np.ndarray, position_um: np.ndarray) -> Cells:
    """Return cells of which only types and places are known."""
    nothing = np.zeros(type_index.size, np.int32)
    return Cells(
        type_index.astype(np.int32),
        nothing,
        nothing,
        np.ascontiguousarray(position_um, float),
        np.zeros(type_index.size),
    )


def read_run(folder: Path, groups: dict[str, tuple[str, ...]]) -> AuditCircuit:
    """Return the circuit of a finished run."""
    folder = Path(folder)
    provenance = read_provenance(folder)
    cells = pq.read_table(folder / "cells.parquet").to_pandas()
    edges = pq.read_table(
        folder / "edges.parquet", columns=["pre_cell_id", "post_cell_id", "synapses_n"]
    )
    names = tuple(str(name) for name in cells.cell_type.cat.categories)
    position = cells[["x_um", "y_um", "z_um"]].to_numpy()
    pre, post, synapses_n = (edges[name].to_numpy() for name in edges.column_names)
    others = pre != post
    return AuditCircuit(
        names,
        make_cells(cells.cell_type.cat.codes.to_numpy(), position),
        pre[others],
        post[others],
        synapses_n[others],
        tuple(provenance["summary"]["wrap_um"]),
        groups,
    )
