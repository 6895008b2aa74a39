"""The circuit under construction: spec, arbors, cells, and what follows from them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from circuitgen.appositions import TARGET_BITS, Scene, make_scene
from circuitgen.column import Cells, Placement, place_cells
from circuitgen.core.errors import InputError
from circuitgen.core.progress import Progress
from circuitgen.core.run_tables import CELLS
from circuitgen.core.tables import names_column
from circuitgen.morphology import Arbor, build_arbor, read_reconstruction
from circuitgen.spec import Spec


@dataclass(frozen=True)
class Circuit:
    """Cells in place with their arbors; `arbors` in the order of `cells.arbor_index`."""

    spec: Spec
    arbors: tuple[Arbor, ...]
    placement: Placement
    scene: Scene
    warnings: tuple[str, ...]
    repairs: tuple[str, ...]

    @property
    def cells(self) -> Cells:
        """The placed cells."""
        return self.placement.cells

    @property
    def wrap_um(self) -> tuple[float, float]:
        """Periods in x and y, 0 where the edge is open."""
        return self.scene.wrap_um

    def pathway(self, pre: np.ndarray, post: np.ndarray) -> np.ndarray:
        """Code of each pair's pathway: presynaptic type x number of types + post."""
        types = self.cells.type_index
        return types[pre].astype(np.int64) * len(self.spec.cell_types) + types[post]


def read_arbors(spec: Spec) -> tuple[list[list[Arbor]], dict[str, list[str]]]:
    """Read all reconstructions of a spec; return arbors by type, and findings.

    Findings are texts by severity, ``warning`` and ``repair``. Raises one InputError
    with the problems of all files.
    """
    files_n = sum(len(cell_type.morphologies) for cell_type in spec.cell_types)
    arbors, problems = [], []
    findings: dict[str, list[str]] = {"warning": [], "repair": []}
    with Progress("reading reconstructions", files_n) as progress:
        for cell_type in spec.cell_types:
            own = []
            for path in cell_type.morphologies:
                try:
                    reconstruction = read_reconstruction(path)
                except InputError as error:
                    problems += error.problems
                    continue
                finally:
                    progress.advance()
                for finding in reconstruction.findings:
                    text = f"{path.name}: {finding.text} ({finding.count})"
                    findings[finding.severity].append(text)
                own.append(
                    build_arbor(
                        reconstruction,
                        upright=cell_type.upright,
                        min_spacing_um=spec.appositions.min_spacing_um,
                        ais_um=cell_type.ais_um,
                    )
                )
            arbors.append(own)
    if problems:
        raise InputError(problems)
    return arbors, findings


def target_masks(spec: Spec) -> np.ndarray:
    """Return bits of the targets that each type's axon may contact."""
    return np.array(
        [sum(TARGET_BITS[t] for t in cell_type.targets) for cell_type in spec.cell_types]
    )


def assemble(spec: Spec) -> Circuit:
    """Read the reconstructions, place the cells, and make them ready for the search."""
    by_type, findings = read_arbors(spec)
    placement = place_cells(spec, by_type)
    arbors = [arbor for own in by_type for arbor in own]
    cells = placement.cells
    scene = make_scene(
        arbors,
        arbor_index=cells.arbor_index,
        position_um=cells.position_um,
        azimuth_deg=cells.azimuth_deg,
        target_mask=target_masks(spec)[cells.type_index],
        max_gap_um=spec.appositions.max_gap_um,
        min_spacing_um=spec.appositions.min_spacing_um,
        autapses=spec.appositions.autapses,
        wrap_um=placement.volume.wrap_um,
    )
    warnings = (*findings["warning"], *placement.warnings)
    repairs = tuple(findings["repair"])
    return Circuit(spec, tuple(arbors), placement, scene, warnings, repairs)


def cells_table(circuit: Circuit) -> dict[str, object]:
    """Return the columns of the table of cells."""
    cells, spec = circuit.cells, circuit.spec
    x, y, z = cells.position_um.T
    signs = ("excitatory", "inhibitory")
    sign_of_type = np.array([signs.index(t.sign) for t in spec.cell_types])
    return {
        "cell_id": np.arange(cells.cells_n),
        "cell_type": names_column(cells.type_index, spec.type_names),
        "layer": names_column(cells.layer_index, [layer.name for layer in spec.layers]),
        "sign": names_column(sign_of_type[cells.type_index], signs),
        "morphology": names_column(
            cells.arbor_index, [arbor.name for arbor in circuit.arbors]
        ),
        "x_um": x,
        "y_um": y,
        "z_um": z,
        "depth_um": spec.thickness_um - z,
        "azimuth_deg": cells.azimuth_deg,
    }


def write_cells(circuit: Circuit, path) -> None:
    """Write the table of cells."""
    CELLS.write_parquet(path, cells_table(circuit))


def soma_offsets(circuit: Circuit, pre, post) -> np.ndarray:
    """Vector from the soma of pre to that of post (n, 3), the shortest under wrap."""
    away = circuit.cells.position_um[post] - circuit.cells.position_um[pre]
    for axis, period in enumerate(circuit.wrap_um):
        if period > 0:
            away[:, axis] -= period * np.round(away[:, axis] / period)
    return away


def block_bounds(circuit: Circuit, most_segments: int) -> Sequence[tuple[int, int]]:
    """Cut the cells into blocks of consecutive ids by their number of axon segments.

    The cut depends on the circuit alone, so that part files are the same everywhere.
    """
    counts = np.diff(circuit.scene.axons.first)[circuit.cells.arbor_index] + 1
    block = (np.cumsum(counts) - 1) // most_segments
    edges = np.flatnonzero(np.diff(block)) + 1
    bounds = [0, *edges.tolist(), circuit.cells.cells_n]
    return list(zip(bounds[:-1], bounds[1:], strict=True))
