"""What a prediction needs of a run folder: cells, pairs by window, laws."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.compute as pc
import pyarrow.dataset as pa_dataset
import pyarrow.parquet as pq

from circuitgen.column import Cells
from circuitgen.core.errors import InputError, Problem, RunFolderError, nearest_name
from circuitgen.run import PairCounter, Protocol, read_provenance, soma_offsets
from circuitgen.wiring import Laws


class RunTables:
    """The tables of one finished run; pathways are numbered as its spec orders types.

    Attributes
    ----------
    folder : Path
    provenance : dict
    type_names : list of str
        In the order of the spec; pathway = pre type x number of types + post type.
    cells : Cells
        In place; layers and reconstructions are left at 0.
    wrap_um : (float, float)
    laws, draws : Laws
        The law that the circuit was drawn with, and the posterior draws.
    """

    def __init__(self, folder: Path):
        self.folder = Path(folder)
        self.provenance = read_provenance(folder)
        try:
            self.wrap_um = tuple(self.provenance["summary"]["wrap_um"])
            self.cell_table = pq.read_table(self.folder / "cells.parquet").to_pandas()
            self.laws, self.draws = self._read_laws()
        except (OSError, KeyError, ValueError) as error:
            raise RunFolderError(
                f"{folder} cannot be read as a run of this version: {error}"
            ) from None
        types = pd.Index(self.type_names).get_indexer(self.cell_table.cell_type)
        n = len(self.cell_table)
        self.cells = Cells(
            types.astype(np.int32),
            np.zeros(n, np.int32),
            np.zeros(n, np.int32),
            self.cell_table[["x_um", "y_um", "z_um"]].to_numpy(),
            self.cell_table.azimuth_deg.to_numpy(),
        )
        self.counter = PairCounter(self)

    def _read_laws(self) -> tuple[Laws, Laws]:
        table = pq.read_table(self.folder / "laws.parquet").to_pandas()
        first = table[table.draw == 0]
        self.type_names = first.pre_type.astype(str).unique().tolist()
        shape = (-1, len(first))
        exponents = [
            table[name].to_numpy().reshape(shape) for name in ("t0", "t1", "t2")
        ]
        everything = Laws(*exponents)
        return everything.only(0), Laws(*(part[1:] for part in exponents))

    @property
    def types_n(self) -> int:
        """Number of cell types."""
        return len(self.type_names)

    def code(self, pre_type: str, post_type: str) -> int:
        """Return the number of a pathway; InputError names the nearest type."""
        problems = [
            Problem(
                str(self.folder),
                None,
                option,
                f"= {name!r} is no cell type of the run",
                nearest_name(name, self.type_names),
            )
            for option, name in (("--pre", pre_type), ("--post", post_type))
            if name not in self.type_names
        ]
        if problems:
            raise InputError(problems)
        names = self.type_names
        return names.index(pre_type) * self.types_n + names.index(post_type)

    def pathway(self, pre: np.ndarray, post: np.ndarray) -> np.ndarray:
        """Return the pathway number of each pair of cells."""
        types = self.cells.type_index
        return types[pre].astype(np.int64) * self.types_n + types[post]

    def pairs(self, pre_types) -> pd.DataFrame:
        """Return the touching pairs from the cells of some types."""
        ids = np.flatnonzero(np.isin(self.cells.type_index, pre_types))
        columns = ["pre_cell_id", "post_cell_id", "appositions_n"]
        if not ids.size:
            return pd.DataFrame({name: np.zeros(0, np.int32) for name in columns})
        pre = pc.field("pre_cell_id")
        near = (pre >= int(ids[0])) & (pre <= int(ids[-1]))
        stored = pa_dataset.dataset(self.folder / "pairs.parquet")
        frame = stored.to_table(columns, filter=near).to_pandas()
        chosen = np.isin(self.cells.type_index[frame.pre_cell_id], pre_types)
        return frame[chosen & (frame.pre_cell_id != frame.post_cell_id)]

    def histograms(self, protocol: Protocol) -> dict[int, np.ndarray]:
        """Return pairs by appositions of every pathway in a window of distances."""
        frame = self.pairs(protocol.pre_types)
        pre, post = frame.pre_cell_id.to_numpy(), frame.post_cell_id.to_numpy()
        offsets = soma_offsets(self, pre, post)
        offsets = offsets[:, :2] if protocol.lateral else offsets
        inside = protocol.holds(np.linalg.norm(offsets, axis=1))
        inside &= np.isin(self.cells.type_index[post], protocol.post_types)
        code = self.pathway(pre[inside], post[inside])
        a = frame.appositions_n.to_numpy()[inside]
        out = {}
        for wanted in protocol.pathways(self.types_n).tolist():
            found = np.bincount(a[code == wanted], minlength=1)
            total = self.counter.count(*divmod(wanted, self.types_n), protocol)
            found[0] = max(int(total) - found.sum(), 0)
            out[wanted] = found
        return out
