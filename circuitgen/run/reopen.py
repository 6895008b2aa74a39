"""A finished run opened again: its cells in place, with their arbors."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq

from circuitgen.appositions import Scene, make_scene
from circuitgen.column import Cells
from circuitgen.core.errors import RunFolderError
from circuitgen.run.circuit import read_arbors, target_masks
from circuitgen.run.folder import PROVENANCE
from circuitgen.run.provenance import hash_inputs
from circuitgen.spec import Spec, load_spec


def read_provenance(folder: Path) -> dict:
    """Return the provenance of a finished run.

    Raises RunFolderError with one message for anything else.
    """
    path = Path(folder) / PROVENANCE
    try:
        return json.loads(path.read_text(encoding="utf-8"))
    except OSError:
        unfinished = Path(folder).with_name(Path(folder).name + ".unfinished")
        if unfinished.exists():
            rule = "is not finished: run the same build command again"
        elif Path(folder).exists():
            rule = "is no run folder: it has no provenance.json"
        else:
            rule = "does not exist"
        raise RunFolderError(f"{folder} {rule}") from None
    except ValueError:
        raise RunFolderError(f"{path} is damaged: it is no JSON") from None


class ReopenedCircuit:
    """Spec, arbors and cells of a finished run; `scene` of all cells or of others.

    Attributes
    ----------
    spec : Spec
    arbors : list of Arbor
        In the order of ``cells.arbor_index``.
    type_of_arbor : int (arbors,)
    cells : Cells
    wrap_um : (float, float)
    """

    def __init__(self, folder: Path):
        provenance = read_provenance(folder)
        self.spec = _unchanged_spec(folder, provenance)
        by_type, _ = read_arbors(self.spec)
        self.arbors = [arbor for own in by_type for arbor in own]
        self.type_of_arbor = np.repeat(
            np.arange(len(by_type)), [len(own) for own in by_type]
        )
        self.wrap_um = tuple(provenance["summary"]["wrap_um"])
        self.cells = self._read_cells(Path(folder) / "cells.parquet")

    def _read_cells(self, path: Path) -> Cells:
        table = pq.read_table(path).to_pandas()
        layers = [layer.name for layer in self.spec.layers]
        places = {
            (int(kind), arbor.name): place
            for place, (kind, arbor) in enumerate(
                zip(self.type_of_arbor, self.arbors, strict=True)
            )
        }
        types = np.array([self.spec.type_names.index(t) for t in table.cell_type])
        arbor = [places[key] for key in zip(types, table.morphology, strict=True)]
        return Cells(
            type_index=types.astype(np.int32),
            layer_index=np.array([layers.index(x) for x in table.layer], np.int32),
            arbor_index=np.array(arbor, np.int32),
            position_um=table[["x_um", "y_um", "z_um"]].to_numpy(),
            azimuth_deg=table.azimuth_deg.to_numpy(),
        )

    def scene(self, arbor_index, position_um, azimuth_deg) -> Scene:
        """Make cells of these reconstructions ready for the search."""
        rules = self.spec.appositions
        return make_scene(
            self.arbors,
            arbor_index=arbor_index,
            position_um=position_um,
            azimuth_deg=azimuth_deg,
            target_mask=target_masks(self.spec)[self.type_of_arbor[arbor_index]],
            max_gap_um=rules.max_gap_um,
            min_spacing_um=rules.min_spacing_um,
            autapses=False,
            wrap_um=self.wrap_um,
        )


def _unchanged_spec(folder: Path, provenance: dict) -> Spec:
    """Load the run's spec again; refuse one that has changed since, or its inputs."""
    path = Path(provenance["spec_path"])
    if not path.exists():
        raise RunFolderError(
            f"{folder} was built from {path}, which is gone; the arbors are needed here"
        )
    spec = load_spec(path)
    if spec.text != provenance["spec_text"]:
        raise RunFolderError(f"{path} has changed since {folder} was built: build again")
    now = hash_inputs(spec)
    changed = sorted(
        name
        for name, digest in provenance["inputs_sha256"].items()
        if now.get(name) != digest
    )
    if changed:
        raise RunFolderError(
            f"{changed[0]} has changed since {folder} was built: build again"
        )
    return spec
