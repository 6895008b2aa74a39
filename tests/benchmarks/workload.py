"""The workload of the search benchmarks: made-up cells, 10 mm of axon, 5 of dendrite.

Branches are persistent random walks that fan out from the soma; a cell has the cable
of a cortical neuron, not its looks. At 90,000 cells per mm3 (BNID 109245, mouse
cortex, after Braitenberg & Schuez 1998) in a box that is periodic sideways.
"""

from __future__ import annotations

import numpy as np

from circuitgen.appositions import make_scene
from circuitgen.morphology.arbor import Arbor, Kind

DENSITY_PER_MM3 = 90_000
AXON_UM, DENDRITE_UM = 10_000.0, 5_000.0
STEP_UM = 3.5
BOX_HEIGHT_UM = 800.0
ARBORS = 20


def _walk(rng, origin, direction, steps, wander):
    turns = direction + np.cumsum(rng.normal(0, wander, (steps, 3)), axis=0)
    turns /= np.linalg.norm(turns, axis=1, keepdims=True)
    points = origin + np.cumsum(turns * STEP_UM, axis=0)
    return np.vstack([origin, points])


def _tree(rng, total_um, branch_um, kind, radius_um):
    """Branches that start on earlier branches until the cable is used up."""
    steps = round(branch_um / STEP_UM)
    branches = round(total_um / (steps * STEP_UM))
    paths: list[np.ndarray] = []
    for index in range(branches):
        direction = rng.normal(size=3)
        if index < 4:
            origin = np.zeros(3)
        else:
            stem = paths[rng.integers(len(paths))]
            origin = stem[rng.integers(len(stem))]
        paths.append(
            _walk(rng, origin, direction / np.linalg.norm(direction), steps, 0.2)
        )
    start = np.concatenate([path[:-1] for path in paths])
    end = np.concatenate([path[1:] for path in paths])
    n = len(start)
    return start, end, np.full(n, kind, np.int8), np.full(n, radius_um)


def make_arbor(rng, name: str) -> Arbor:
    """Grow one made-up cell."""
    soma = np.zeros((1, 3)), np.zeros((1, 3)), np.array([1], np.int8), np.array([7.0])
    parts = [
        soma,
        _tree(rng, AXON_UM, 210.0, Kind.AXON, 0.15),
        _tree(rng, DENDRITE_UM, 140.0, Kind.BASAL, 0.5),
    ]
    columns = [np.concatenate(part) for part in zip(*parts, strict=True)]
    start, end, kind, radius = columns
    n = len(kind)
    bounds = np.concatenate([[0.0], np.cumsum(np.linalg.norm(end - start, axis=1))])
    return Arbor(
        name=name,
        start_um=start,
        end_um=end,
        start_radius_um=radius,
        end_radius_um=radius.copy(),
        kind=kind,
        parent=np.full(n, -1, np.int32),
        initial=np.zeros(n, bool),
        path_um=bounds[:-1].copy(),
        path_end_um=bounds[1:].copy(),
        cable_start_um=bounds[:-1].copy(),
        cable_end_um=bounds[1:].copy(),
        first_piece=np.arange(n),
        last_piece=np.arange(n),
        piece_number=np.arange(1, n + 1),
        piece_backward=np.zeros(len(kind), bool),
        piece_bounds_um=bounds,
    )


def make_workload(cells_n: int, max_gap_um: float = 1.0, seed: int = 1):
    """Return a Scene of `cells_n` cells and its arguments, in id order along a curve."""
    rng = np.random.default_rng(seed)
    arbors = [make_arbor(rng, f"made_{index}") for index in range(ARBORS)]
    side = np.sqrt(cells_n / DENSITY_PER_MM3 * 1e9 / BOX_HEIGHT_UM)
    position = rng.uniform(0, 1, (cells_n, 3)) * [side, side, BOX_HEIGHT_UM]
    tile = np.floor(position[:, :2] / 150.0).astype(int)
    tile[tile[:, 0] % 2 == 1, 1] *= -1
    position = position[np.lexsort([position[:, 2], tile[:, 1], tile[:, 0]])]
    arguments = {
        "arbor_index": rng.integers(0, ARBORS, cells_n),
        "position_um": position,
        "azimuth_deg": rng.uniform(0, 360, cells_n),
        "target_mask": np.full(cells_n, 13),
        "max_gap_um": max_gap_um,
        "min_spacing_um": 4.0,
        "wrap_um": (side, side),
    }
    return make_scene(arbors, **arguments), arbors, arguments
