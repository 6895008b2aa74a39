"""Small made-up arbors and circuits for tests; random, not measured."""

from __future__ import annotations

import numpy as np

from circuitgen.appositions import make_scene
from circuitgen.morphology.arbor import Arbor, Kind

ALL_TARGETS = 15
DENDRITES_AND_SOMA = 13


def arbor_from_segments(start, end, kind, radius=0.3, initial=None, name="made"):
    """Make an Arbor of capsules given as rows; radii constant or per segment."""
    start, end = np.asarray(start, float), np.asarray(end, float)
    kind = np.asarray(kind, np.int8)
    radius = np.broadcast_to(np.asarray(radius, float), kind.shape).copy()
    length = np.linalg.norm(end - start, axis=1)
    bounds = np.concatenate([[0.0], np.cumsum(length)])
    if initial is None:
        initial = np.zeros(kind.size, bool)
    return Arbor(
        name=name,
        start_um=start,
        end_um=end,
        start_radius_um=radius,
        end_radius_um=radius.copy(),
        kind=kind,
        parent=np.full(kind.size, -1, np.int32),
        initial=np.asarray(initial, bool),
        path_um=bounds[:-1].copy(),
        path_end_um=bounds[1:].copy(),
        cable_start_um=bounds[:-1].copy(),
        cable_end_um=bounds[1:].copy(),
        first_piece=np.arange(kind.size),
        last_piece=np.arange(kind.size),
        piece_number=np.arange(1, kind.size + 1),
        piece_backward=np.zeros(len(kind), bool),
        piece_bounds_um=bounds,
    )


def random_arbor(rng, *, axon=30, dendrite=20, spread_um=25.0, step_um=4.0):
    """Make an arbor of random walks: soma, basal, apical, axon with initial segment."""
    pieces = [(np.zeros(3), np.zeros(3), Kind.SOMA, 5.0, False)]
    for kind, count in ((Kind.AXON, axon), (Kind.BASAL, dendrite), (Kind.APICAL, 8)):
        here = rng.normal(0, spread_um / 2, 3)
        for index in range(count):
            if index % 7 == 6:
                here = rng.normal(0, spread_um / 2, 3)
            there = here + rng.normal(0, 1, 3) * step_um / 2
            radius = rng.uniform(0.05, 0.9)
            pieces.append((here, there, kind, radius, kind == Kind.AXON and index < 3))
            here = there
    start, end, kind, radius, initial = zip(*pieces, strict=True)
    return arbor_from_segments(start, end, kind, radius, initial)


def random_scene(rng, *, cells=8, arbors=3, box_um=40.0, wrap=False, **rules):
    """Place random arbors at random; returns (scene, arbors, arguments of the scene)."""
    library = [random_arbor(rng) for _ in range(arbors)]
    arguments = {
        "arbor_index": rng.integers(0, arbors, cells),
        "position_um": rng.uniform(-box_um / 2, box_um / 2, (cells, 3)),
        "azimuth_deg": rng.uniform(0, 360, cells),
        "target_mask": rng.choice([ALL_TARGETS, DENDRITES_AND_SOMA, 2], cells),
        "max_gap_um": 1.0,
        "min_spacing_um": 4.0,
        "wrap_um": (box_um, box_um) if wrap else (0.0, 0.0),
        **rules,
    }
    return make_scene(library, **arguments), library, arguments
