"""From laws to a circuit: keyed draws, pair by pair."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.core.draws import uniforms
from circuitgen.wiring import kernels
from circuitgen.wiring.law import Law, connection_probability, count_moments, log_ways

_CHUNK = 1 << 20
_DRAWS = 4


@dataclass(frozen=True)
class LawTables:
    """What the laws say for every number of appositions, tabulated.

    Arrays by (pathway, appositions): `connects` P(connected), `low` and `high` its
    interval (NaN where none), `expected` synapses, `ways` S_a. By pathway: t1, t2.
    """

    connects: np.ndarray
    low: np.ndarray
    high: np.ndarray
    expected: np.ndarray
    ways: np.ndarray
    t1: np.ndarray
    t2: np.ndarray


def tabulate(
    laws: list[Law], t0_low: np.ndarray, t0_high: np.ndarray, most: int
) -> LawTables:
    """Tabulate laws for 0 to `most` appositions; t0_low and t0_high may be NaN."""
    a = np.arange(most + 1)
    rows: dict[str, list[np.ndarray]] = {
        name: [] for name in ("connects", "low", "high", "expected", "ways")
    }
    for law, low, high in zip(laws, t0_low, t0_high, strict=True):
        connects = connection_probability(a, law)
        rows["connects"].append(connects)
        rows["ways"].append(log_ways(a, law.t1, law.t2))
        rows["expected"].append(connects * count_moments(a, law.t1, law.t2)[0])
        for name, t0 in (("low", low), ("high", high)):
            rows[name].append(connection_probability(a, Law(t0, law.t1, law.t2)))
    return LawTables(
        **{name: np.array(parts) for name, parts in rows.items()},
        t1=np.array([law.t1 for law in laws]),
        t2=np.array([law.t2 for law in laws]),
    )


def draw_synapses(
    seed, pre, post, appositions, pathway, tables: LawTables
) -> np.ndarray:
    """Draw how many synapses every pair has; 0 means unconnected.

    Parameters
    ----------
    seed : int
        The spec's seed.
    pre, post : int (n,)
        Cell ids; they key the draws, so that order and blocks do not matter.
    appositions : int (n,)
        Appositions of each pair.
    pathway : int (n,)
        Row of each pair in the tables.

    Returns
    -------
    int32 (n,)
    """
    out = np.zeros(len(pre), np.int32)
    for begin in range(0, len(pre), _CHUNK):
        part = slice(begin, begin + _CHUNK)
        kernels.draw_counts(
            uniforms(seed, "connection", pre[part], post[part]),
            appositions[part],
            pathway[part],
            tables.connects,
            tables.ways,
            tables.t1,
            tables.t2,
            out[part],
        )
    return out


def choose_sites(seed, pre, post, appositions, synapses) -> np.ndarray:
    """Choose which appositions of connected pairs carry the synapses.

    Parameters
    ----------
    seed, pre, post, appositions
        As in `draw_synapses`, for the connected pairs.
    synapses : int (n,)
        Synapses of each pair, at most its appositions.

    Returns
    -------
    bool (sum of appositions,)
        For the sites of pair after pair.
    """
    blocks = -(-appositions // _DRAWS)
    pair = np.repeat(np.arange(len(pre)), blocks)
    block = np.arange(blocks.sum()) - np.repeat(np.cumsum(blocks) - blocks, blocks)
    draws = uniforms(seed, "sites", pre[pair], post[pair], index=block).reshape(-1)
    keep = np.arange(draws.size) - np.repeat(
        (np.cumsum(blocks) - blocks) * _DRAWS, blocks * _DRAWS
    )
    draws = draws[keep < np.repeat(appositions, blocks * _DRAWS)]
    out = np.zeros(draws.size, np.bool_)
    kernels.choose(draws, appositions, synapses, out)
    return out
