"""Specs without files, simple arbors and slow twins for the tests of the column."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from builders import arbor_from_segments

from circuitgen.morphology.arbor import Kind
from circuitgen.spec import CellType, Spec
from circuitgen.spec.models import AppositionRules, ColumnSpec, Conduction, Layer


def make_type(name="one", *, radius=0.5, count=None, density=None):
    """Make a cell type without reconstruction files."""
    return CellType.model_construct(
        name=name,
        sign="excitatory",
        density_per_mm3=density or {},
        count=count or {},
        morphologies=(),
        upright="y",
        soma_radius_um=radius,
        targets=("soma",),
        ais_um=40.0,
    )


def make_spec(
    *types, layers=(("L1", 100.0), ("L2", 300.0)), seed=3, mesh=None, **column
):
    """Make a checked spec; `column` as in a spec file, a cylinder by default."""
    if mesh is not None:
        column = {"shape": "mesh", "file": mesh}
    column = column or {"shape": "cylinder", "diameter_um": 200.0}
    return Spec(
        path=Path("spec.yaml"),
        text="",
        name="made",
        seed=seed,
        column=ColumnSpec.model_construct(**column),
        layers=tuple(Layer(name=name, thickness_um=size) for name, size in layers),
        cell_types=types,
        groups={},
        appositions=AppositionRules(),
        recordings=(),
        conduction=Conduction(),
        input_files=(),
    )


def make_arbor(up_um=20.0, down_um=20.0, *, apical=True, side_um=0.0, steps=20):
    """Make an arbor of a soma and three straight branches cut into `steps` pieces."""
    ends = [
        (Kind.APICAL if apical else Kind.BASAL, np.array([0.0, 0.0, up_um])),
        (Kind.AXON, np.array([0.0, 0.0, -down_um])),
        (Kind.BASAL, np.array([side_um, 0.0, 0.0])),
    ]
    rows = [(np.zeros(3), np.zeros(3), Kind.SOMA)]
    for kind, end in ends:
        points = np.linspace(0, 1, steps + 1)[:, None] * end
        rows += [
            (begin, stop, kind)
            for begin, stop in zip(points[:-1], points[1:], strict=True)
        ]
    start, end, kind = zip(*rows, strict=True)
    return arbor_from_segments(start, end, kind)


def outside_share(arbor, height_um, thickness_um):
    """Share of the cable whose pieces have their middle outside the cortex."""
    outside = total = 0.0
    for begin, end in zip(arbor.start_um, arbor.end_um, strict=True):
        length = np.linalg.norm(end - begin)
        middle = height_um + (begin[2] + end[2]) / 2
        total += length
        outside += length * (middle < 0 or middle > thickness_um)
    return outside / total


def apical_top(arbor):
    """Height of the apical dendrite's top above the soma; minus infinity without."""
    tops = [
        end[2]
        for end, kind in zip(arbor.end_um, arbor.kind, strict=True)
        if kind == Kind.APICAL
    ]
    return max(tops, default=-np.inf)
