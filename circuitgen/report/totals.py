"""One pass through all touching pairs, one through the connections: sums by pathway."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.report.source import RunTables

BIN_UM = 25.0
DEPTH_BINS = 32
MOST_IN_HISTOGRAM = 30  # the last bar holds this number and more


@dataclass(frozen=True)
class PairTotals:
    """Sums over touching pairs of different cells; P pathways.

    Attributes
    ----------
    appositions : int64 (P, MOST_IN_HISTOGRAM + 1)
        Touching pairs by their number of appositions.
    by_depth : int64 (DEPTH_BINS, DEPTH_BINS)
        Appositions by depth of the presynaptic, then of the postsynaptic soma.
    """

    appositions: np.ndarray
    by_depth: np.ndarray


def thickness_um(run: RunTables) -> float:
    """Return the thickness of the cortex."""
    return float(sum(layer["thickness_um"] for layer in run.spec["layers"]))


def _sums(keys, weights, shape) -> np.ndarray:
    size = int(np.prod(shape))
    return np.bincount(keys, weights, minlength=size)[:size].reshape(shape)


def pair_totals(run: RunTables) -> PairTotals:
    """Sum over all touching pairs, part after part."""
    types_n, most = len(run.type_names), MOST_IN_HISTOGRAM
    appositions = np.zeros((types_n**2, most + 1), np.int64)
    by_depth = np.zeros((DEPTH_BINS, DEPTH_BINS))
    depth = run.cells.depth_um / thickness_um(run) * DEPTH_BINS
    depth = np.clip(depth.astype(np.int64), 0, DEPTH_BINS - 1)
    names = ["pre_cell_id", "post_cell_id", "appositions_n"]
    for batch in run.batches("pairs", names):
        others = batch["pre_cell_id"] != batch["post_cell_id"]
        pre, post, n = (batch[k][others] for k in names)
        code = run.pathway_code(pre, post)
        keys = code * (most + 1) + np.minimum(n, most)
        appositions += _sums(keys, None, appositions.shape)
        key = depth[pre] * DEPTH_BINS + depth[post]
        by_depth += _sums(key, n, by_depth.shape)
    return PairTotals(appositions, by_depth.astype(int))


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
