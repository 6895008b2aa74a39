"""Connections, numbers of synapses and their sites, drawn pair by pair.

Every draw is keyed by the two cells, so pairs may come in any order and in any parts.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import special

from circuitgen.core.draws import uniforms
from circuitgen.wiring import kernels
from circuitgen.wiring.law import log_odds, ways
from circuitgen.wiring.pathway_laws import PathwayLaws

# Draws of so many pairs stay in the processor's cache.
_PAIRS_AT_ONCE = 1 << 14


class PairEstimates(NamedTuple):
    """What the laws say about pairs, arrays of float64 (pairs,).

    Attributes
    ----------
    p_connect : ndarray
        Probability of at least one synapse.
    p_connect_low, p_connect_high : ndarray
        The same at the ends of the pathway's interval; NaN where it has none.
    synapses_expected : ndarray
        Mean number of synapses of the pair, connected or not.
    """

    p_connect: np.ndarray
    p_connect_low: np.ndarray
    p_connect_high: np.ndarray
    synapses_expected: np.ndarray


class _Table(NamedTuple):
    """Values of the laws by pathway and number of appositions, in one run each."""

    first: np.ndarray
    pathway: np.ndarray
    log_sum: np.ndarray
    mean: np.ndarray

    def odds(self, t0: np.ndarray) -> np.ndarray:
        """Log-odds of connection, for one t0 a pathway."""
        return log_odds(self.log_sum, t0.ravel()[self.pathway])


def _tabulate(a: np.ndarray, pathway: np.ndarray, laws: PathwayLaws) -> _Table:
    """Work the laws out for a = 0 up to the most appositions of each pathway."""
    most = np.full(laws.t0.size, -1, np.int64)
    np.maximum.at(most, pathway, a)
    first = np.cumsum(most + 1) - (most + 1)
    present = np.flatnonzero(most >= 0)
    runs = [
        ways(np.arange(most[law] + 1), laws.t1.flat[law], laws.t2.flat[law])
        for law in present
    ]
    log_sum, mean, _ = (
        np.concatenate([np.zeros(0), *part]) for part in zip(*runs, strict=True)
    )
    return _Table(first, np.repeat(present, most[present] + 1), log_sum, mean)


def _checked(appositions_n, pathway_index, laws) -> tuple[np.ndarray, np.ndarray]:
    a = np.asarray(appositions_n, dtype=np.int64)
    pathway = np.asarray(pathway_index, dtype=np.int64)
    if a.shape != pathway.shape or a.ndim != 1:
        raise ValueError("appositions_n and pathway_index must be (pairs,) arrays")
    if a.size and (a.min() < 0 or pathway.min() < 0 or pathway.max() >= laws.t0.size):
        raise ValueError("an appositions_n or a pathway_index is out of its range")
    return a, pathway


def evaluate_pairs(appositions_n, pathway_index, laws: PathwayLaws) -> PairEstimates:
    """Return what the laws say about every pair.

    Parameters
    ----------
    appositions_n : int (pairs,)
        Appositions of each pair.
    pathway_index : int (pairs,)
        Pathway of each pair: presynaptic type * number of types + postsynaptic type.
    laws : PathwayLaws
        The laws.
    """
    a, pathway = _checked(appositions_n, pathway_index, laws)
    if not a.size:
        return PairEstimates(*np.zeros((4, 0)))
    table = _tabulate(a, pathway, laws)
    p, low, high = (
        special.expit(table.odds(t0)) for t0 in (laws.t0, laws.t0_low, laws.t0_high)
    )
    expected = p * np.nan_to_num(table.mean)
    entry = table.first[pathway] + a
    return PairEstimates(*(values[entry] for values in (p, low, high, expected)))


def draw_synapse_counts(
    seed: int, pre, post, appositions_n, pathway_index, laws: PathwayLaws
) -> np.ndarray:
    """Draw the number of synapses of every pair.

    Parameters
    ----------
    seed : int
        The spec's seed.
    pre, post : int (pairs,)
        Cell ids, the key of the draw.
    appositions_n, pathway_index, laws
        As for `evaluate_pairs`.

    Returns
    -------
    ndarray of int32 (pairs,)
        0 where the pair is not connected, at most its appositions.
    """
    a, pathway = _checked(appositions_n, pathway_index, laws)
    pre, post = np.asarray(pre), np.asarray(post)
    counts = np.zeros(a.size, np.int32)
    if not a.size:
        return counts
    table = _tabulate(a, pathway, laws)
    probability = special.expit(table.odds(laws.t0))
    logs = np.concatenate([[-np.inf], np.log(np.arange(1.0, a.max() + 2.0))])
    law = (table.first, probability, table.log_sum, laws.t1.ravel(), laws.t2.ravel())
    for begin in range(0, a.size, _PAIRS_AT_ONCE):
        part = slice(begin, begin + _PAIRS_AT_ONCE)
        uniform = uniforms(seed, "connection", pre[part], post[part])
        kernels.draw_counts(uniform, pathway[part], a[part], *law, logs, counts[part])
    return counts


def choose_sites(seed: int, pre, post, appositions_n, synapses_n) -> np.ndarray:
    """Choose which appositions of each pair carry its synapses.

    Every subset of the given size is equally likely.

    Parameters
    ----------
    seed : int
        The spec's seed.
    pre, post : int (pairs,)
        Cell ids, with the place of the apposition the key of the draw.
    appositions_n, synapses_n : int (pairs,)
        Appositions of each pair, and how many of them to choose.

    Returns
    -------
    ndarray of bool (sum of appositions_n,)
        For the appositions of all pairs, one pair after the other.
    """
    a = np.asarray(appositions_n, dtype=np.int64)
    wanted = np.asarray(synapses_n, dtype=np.int64)
    if np.any(wanted < 0) or np.any(wanted > a):
        raise ValueError("synapses_n must lie between 0 and appositions_n")
    pre, post = np.asarray(pre), np.asarray(post)
    chosen = np.zeros(int(a.sum()), bool)
    first_site = np.cumsum(a) - a
    for begin in range(0, a.size, _PAIRS_AT_ONCE):
        part = slice(begin, begin + _PAIRS_AT_ONCE)
        blocks = -(-a[part] // 4)
        first_draw = np.cumsum(blocks) - blocks
        index = np.arange(int(blocks.sum())) - np.repeat(first_draw, blocks)
        keys = (np.repeat(pre[part], blocks), np.repeat(post[part], blocks))
        uniform = uniforms(seed, "synapse sites", *keys, index=index)
        kernels.choose_in_turn(
            uniform, first_draw, a[part], wanted[part], first_site[part], chosen
        )
    return chosen
