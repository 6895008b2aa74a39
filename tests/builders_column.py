"""Small specs for tests of the column; all numbers invented unless a test says so."""

from __future__ import annotations

from pathlib import Path

from builders import arbor_from_segments

from circuitgen.morphology.arbor import Kind
from circuitgen.spec import (
    AppositionRules,
    CellType,
    ColumnSpec,
    Conduction,
    Layer,
    Spec,
)

BOX = {"shape": "box", "width_um": 200.0, "length_um": 150.0}
CYLINDER = {"shape": "cylinder", "diameter_um": 300.0}
HEXAGON = {"shape": "hexagon", "across_flats_um": 260.0}


def cell_type(name, *, density=None, count=None, radius_um=7.0) -> CellType:
    """Make a cell type with a density or a count by layer."""
    return CellType.model_construct(
        name=name,
        sign="excitatory",
        density_per_mm3=density or {},
        count=count or {},
        morphologies=(),
        upright="y",
        soma_radius_um=radius_um,
        targets=("soma", "basal", "apical"),
        ais_um=40.0,
    )


def make_spec(column, layers, *types, seed=7, path=Path("spec.yaml")) -> Spec:
    """Make a spec of a column (fields), layers (name: thickness) and cell types."""
    return Spec(
        name="invented",
        seed=seed,
        column=ColumnSpec(**column),
        layers=tuple(
            Layer(name=name, thickness_um=float(thickness))
            for name, thickness in layers.items()
        ),
        cell_types=types,
        groups={},
        appositions=AppositionRules(),
        recordings=(),
        conduction=Conduction(),
        path=path,
        text="",
        input_files=(),
    )


def upright_arbor(top_um, bottom_um=-50.0, *, kind=Kind.APICAL, radius_um=6.0, name="a"):
    """Make an arbor of a soma, one piece straight up and an axon straight down."""
    rows = [([0, 0, 0], [0, 0, 0], Kind.SOMA, radius_um)]
    for end, what in ((top_um, kind), (bottom_um, Kind.AXON)):
        steps = max(int(abs(end) // 4), 1)
        heights = [end * step / steps for step in range(steps + 1)]
        for low, high in zip(heights[:-1], heights[1:], strict=True):
            rows.append(([0, 0, low], [0, 0, high], what, 0.5))
    start, end, kinds, radius = zip(*rows, strict=True)
    return arbor_from_segments(start, end, kinds, radius, name=name)
