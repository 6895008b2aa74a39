"""Connected pairs in space, each typical of its class, with their synapses."""

from __future__ import annotations

import numpy as np
from scipy.spatial import cKDTree

from circuitgen.morphology.arbor import Kind
from circuitgen.report.drawing import ArborShelf, drawn_cell, placed
from circuitgen.report.source import RunTables

CANDIDATES = 20
# An axon's centre line passes a target's within a gap and two radii.
_NEAR_UM = 10.0


def shown_pairs(run: RunTables, shelf: ArborShelf) -> list[dict]:
    """Return one typical connected pair of each class of signs, as it lies in space.

    Typical: it has the class's mean number of synapses, rounded; of those pairs the
    one whose soma distance is nearest to the class's median. Where the column wraps,
    the first of the nearest whose synapses one image of the axon reaches.
    """
    classes = _candidates(run)
    found = _synapses(run, [pair for own in classes for pair in own])
    out = []
    for own in classes:
        drawn = (_drawn(run, shelf, pair, found[pair]) for pair in own)
        whole = next((pair for pair in drawn if pair), None)
        if whole:
            out.append(whole)
    return out


def _soma_distance_um(run: RunTables, pre, post) -> np.ndarray:
    """Distance of the somata, the shortest where the column wraps."""
    away = run.cells.position_um[post] - run.cells.position_um[pre]
    for axis, period in enumerate(run.wrap_um):
        if period > 0:
            away[:, axis] -= period * np.round(away[:, axis] / period)
    return np.linalg.norm(away, axis=1)


def _candidates(run: RunTables) -> list[list[tuple[int, int]]]:
    """Return the most typical connected pairs of each class, best first."""
    edges = run.edges
    pre, post, n = edges["pre_cell_id"], edges["post_cell_id"], edges["synapses_n"]
    excitatory = np.array(run.is_excitatory)[run.cells.type_index]
    distance = _soma_distance_um(run, pre, post)
    out = []
    for signs in ((True, True), (True, False), (False, True), (False, False)):
        own = (excitatory[pre] == signs[0]) & (excitatory[post] == signs[1])
        own &= pre != post
        if not own.any():
            continue
        off = np.abs(distance - np.median(distance[own]))
        typical = np.abs(n - round(float(n[own].mean())))
        own = np.flatnonzero(own)
        best = own[np.lexsort((off[own], typical[own]))][:CANDIDATES]
        out.append([(int(pre[row]), int(post[row])) for row in best])
    return out


def _synapses(run: RunTables, pairs: list[tuple[int, int]]) -> dict:
    """Return the synapses of some pairs, in one pass through the table."""
    names = ["pre_cell_id", "post_cell_id", "x_um", "y_um", "z_um", "delay_ms"]
    names += ["axon_path_um", "dendrite_path_um"]
    n = run.cells.type_index.size
    wanted = np.array([pre * n + post for pre, post in pairs], np.int64)
    out: dict[tuple[int, int], list[tuple]] = {pair: [] for pair in pairs}
    for batch in run.batches("synapses", names):
        key = batch["pre_cell_id"].astype(np.int64) * n + batch["post_cell_id"]
        own = np.isin(key, wanted)
        for pre, post, *rest in zip(
            *(batch[k][own].tolist() for k in names), strict=True
        ):
            out[pre, post].append(rest)
    return out


def _drawn(run: RunTables, shelf: ArborShelf, pair, found) -> dict | None:
    """Return a pair for the page; None where it cannot be drawn whole."""
    pre, post = pair
    arbor = shelf.arbor(pre)
    if arbor is None or shelf.arbor(post) is None:
        return None
    places = np.array([row[:3] for row in found])
    axon = placed(run, pre, arbor.end_um[arbor.kind == Kind.AXON])
    shift = _image_shift_um(run, axon, places)
    if shift is None:
        return None
    synapses = [
        {
            "at": [round(value, 1) for value in row[:3]],
            "delay_ms": round(row[3], 2),
            "axon_path_um": round(row[4], 1),
            "dendrite_path_um": round(row[5], 1),
        }
        for row in found
    ]
    distance = _soma_distance_um(run, np.array([pre]), np.array([post]))
    return {
        "pre": drawn_cell(run, shelf, pre, shift),
        "post": drawn_cell(run, shelf, post),
        "synapses": synapses,
        "distance_um": round(float(distance[0]), 1),
    }


def _image_shift_um(run: RunTables, axon_um, places_um) -> np.ndarray | None:
    """Return the shift that brings the presynaptic cell's axon to all synapses."""
    x, y = run.wrap_um
    if x <= 0:
        return np.zeros(3)
    tree = cKDTree(axon_um)
    for i in (0, -1, 1):
        for j in (0, -1, 1):
            shift = np.array([i * x, j * y, 0.0])
            if tree.query(places_um - shift)[0].max() < _NEAR_UM:
                return shift
    return None
