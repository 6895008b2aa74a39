"""One pass through all touching pairs, one through the connections: sums by pathway."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.spatial import cKDTree

from circuitgen.report.source import RunTables

BIN_UM = 25.0
DEPTH_BINS = 32
MOST_IN_HISTOGRAM = 30  # the last bar holds this number and more


@dataclass(frozen=True)
class PairTotals:
    """Sums over touching pairs of different cells; P pathways, B bins of distance.

    Attributes
    ----------
    appositions : int64 (P, MOST_IN_HISTOGRAM + 1)
        Touching pairs by their number of appositions.
    expected, expected_low, expected_high : float64 (P, B)
        Sums of the pairs' connection probability and of its bounds.
    bounded : bool (P,)
        True where every pair has bounds.
    by_depth : int64 (DEPTH_BINS, DEPTH_BINS)
        Appositions by depth of the presynaptic, then of the postsynaptic soma.
    """

    appositions: np.ndarray
    expected: np.ndarray
    expected_low: np.ndarray
    expected_high: np.ndarray
    bounded: np.ndarray
    by_depth: np.ndarray


def thickness_um(run: RunTables) -> float:
    """Return the thickness of the cortex."""
    return float(sum(layer["thickness_um"] for layer in run.spec["layers"]))


def _bins_n(run: RunTables) -> int:
    """Return the bins of distance that the column's diagonal asks for."""
    spread = np.ptp(run.cells.position_um, axis=0)
    return int(np.linalg.norm(spread) // BIN_UM) + 1


def _sums(keys, weights, shape) -> np.ndarray:
    size = int(np.prod(shape))
    return np.bincount(keys, weights, minlength=size)[:size].reshape(shape)


def pair_totals(run: RunTables) -> PairTotals:
    """Sum over all touching pairs, part after part."""
    types_n, bins = len(run.type_names), _bins_n(run)
    grid, most = (types_n**2, bins), MOST_IN_HISTOGRAM
    appositions = np.zeros((types_n**2, most + 1), np.int64)
    expected, low, high = np.zeros((3, *grid))
    unbounded = np.zeros(types_n**2, np.int64)
    by_depth = np.zeros((DEPTH_BINS, DEPTH_BINS))
    depth = run.cells.depth_um / thickness_um(run) * DEPTH_BINS
    depth = np.clip(depth.astype(np.int64), 0, DEPTH_BINS - 1)
    names = ["pre_cell_id", "post_cell_id", "appositions_n", "soma_distance_um"]
    names += ["p_connect", "p_connect_low", "p_connect_high"]
    for batch in run.batches("pairs", names):
        others = batch["pre_cell_id"] != batch["post_cell_id"]
        pre, post, n, distance, p, p_low, p_high = (batch[k][others] for k in names)
        code = run.pathway_code(pre, post)
        place = code * bins + np.minimum((distance / BIN_UM).astype(np.int64), bins - 1)
        keys = code * (most + 1) + np.minimum(n, most)
        appositions += _sums(keys, None, appositions.shape)
        expected += _sums(place, p, grid)
        low += _sums(place, np.nan_to_num(p_low), grid)
        high += _sums(place, np.nan_to_num(p_high), grid)
        unbounded += np.bincount(code[np.isnan(p_low)], minlength=types_n**2)
        key = depth[pre] * DEPTH_BINS + depth[post]
        by_depth += _sums(key, n, by_depth.shape)
    bounded = (unbounded == 0) & (appositions.sum(axis=1) > 0)
    return PairTotals(appositions, expected, low, high, bounded, by_depth.astype(int))


def pairs_by_distance(run: RunTables) -> np.ndarray:
    """Count all ordered pairs of different cells, touching or not, (pathways, bins)."""
    cells, wrap, bins = run.cells, run.wrap_um, _bins_n(run)
    points, box = cells.position_um, None
    if wrap[0] > 0:
        box = np.array([*wrap, 0.0])
        points = points.copy()
        points[:, :2] %= wrap
        points[:, :2][points[:, :2] >= wrap] = 0.0
    types_n = len(run.type_names)
    trees = [cKDTree(points[cells.type_index == t], boxsize=box) for t in range(types_n)]
    edges = np.arange(1, bins + 1) * BIN_UM
    out = np.zeros((types_n, types_n, bins), np.int64)
    for pre in range(types_n):
        for post in range(pre, types_n):
            # A pair on a bound belongs to the bin above.
            upto = trees[pre].count_neighbors(trees[post], np.nextafter(edges, 0))
            counts = np.diff(upto, prepend=trees[pre].n if pre == post else 0)
            out[pre, post] = out[post, pre] = counts
    return out.reshape(types_n**2, bins)


@dataclass(frozen=True)
class ConnectionTotals:
    """Histograms over the connections of the drawn circuit, by pathway.

    `synapses` (P, MOST_IN_HISTOGRAM + 1); `delays` (P, bins of `delay_bin_ms`).
    """

    synapses: np.ndarray
    delays: np.ndarray
    delay_bin_ms: float


def connection_totals(run: RunTables) -> ConnectionTotals:
    """Sum over the connections."""
    edges, types_n = run.edges, len(run.type_names)
    code = run.pathway_code(edges["pre_cell_id"], edges["post_cell_id"])
    most, delay = MOST_IN_HISTOGRAM, edges["delay_ms"].astype(float)
    keys = code * (most + 1) + np.minimum(edges["synapses_n"], most)
    synapses = _sums(keys, None, (types_n**2, most + 1))
    longest = delay.max(initial=0.0)
    width = next((w for w in (0.1, 0.2, 0.5, 1.0, 2.0) if longest < 40 * w), 5.0)
    bins = min(int(longest / width) + 1, 200)
    place = np.minimum((delay / width).astype(np.int64), bins - 1)
    delays = _sums(code * bins + place, None, (types_n**2, bins))
    return ConnectionTotals(synapses, delays, width)
