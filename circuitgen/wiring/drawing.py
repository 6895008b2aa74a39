"""From laws to a circuit: keyed draws, pair by pair."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.core.draws import uniforms
from circuitgen.wiring import kernels
from circuitgen.wiring.law import connection_probability, count_moments, log_ways
from circuitgen.wiring.laws import Laws, connection_table
from circuitgen.wiring.reciprocity import conditional_probability

_CHUNK = 1 << 20
_DRAWS = 4
# The 90 % interval.
INTERVAL = (0.05, 0.95)


@dataclass(frozen=True)
class LawTables:
    """What the laws say for every number of appositions, tabulated.

    Arrays by (pathway, appositions): `connects` P(connected), `low` and `high` its
    posterior 5 and 95 % points, `expected` synapses, `ways` S_a. By pathway: t1, t2.
    """

    connects: np.ndarray
    low: np.ndarray
    high: np.ndarray
    expected: np.ndarray
    ways: np.ndarray
    t1: np.ndarray
    t2: np.ndarray


def tabulate(laws: Laws, draws: Laws, most: int) -> LawTables:
    """Tabulate laws and the spread of their draws for 0 to `most` appositions."""
    a = np.arange(most + 1)
    rows: dict[str, list[np.ndarray]] = {
        name: [] for name in ("connects", "low", "high", "expected", "ways")
    }
    for pathway in range(laws.t0.shape[1]):
        law = laws.law(pathway)
        connects = connection_probability(a, law)
        rows["connects"].append(connects)
        rows["ways"].append(log_ways(a, law.t1, law.t2))
        rows["expected"].append(connects * count_moments(a, law.t1, law.t2)[0])
        drawn = connection_table(draws, pathway, most)
        for name, bound in zip(("low", "high"), INTERVAL, strict=True):
            rows[name].append(np.quantile(drawn, bound, axis=0))
    return LawTables(
        **{name: np.array(parts) for name, parts in rows.items()},
        t1=laws.t1[0],
        t2=laws.t2[0],
    )


def connection_chance(
    seed, pre, post, appositions, pathway, tables: LawTables, log_odds, reverse
) -> np.ndarray:
    """Return each pair's chance to connect, given what the lower cell id's way does.

    The direction from the lower cell id is drawn by its own probability, the other
    given the outcome; both by draws keyed by their own ids, so that neither blocks nor
    order matter. Without reciprocity a pair's chance is its probability.

    Parameters
    ----------
    seed, pre, post, appositions, pathway, tables
        As in `draw_synapses`.
    log_odds : (types, types)
        Log odds ratios of reciprocity, symmetric.
    reverse : callable
        Gives the appositions of ordered pairs (pre, post) of types with reciprocity.
    """
    chance = tables.connects[pathway, appositions]
    types_n = log_odds.shape[0]
    from_type, to_type = np.divmod(pathway, types_n)
    ratio = log_odds[from_type, to_type]
    later = np.flatnonzero((ratio != 0.0) & (pre > post))
    if later.size:
        back = to_type[later] * types_n + from_type[later]
        first = tables.connects[back, reverse(post[later], pre[later])]
        outcome = uniforms(seed, "connection", post[later], pre[later])[:, 0] < first
        chance[later] = conditional_probability(
            chance[later], first, ratio[later], outcome
        )
    return chance


def draw_synapses(
    seed, pre, post, appositions, pathway, tables: LawTables, chance
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
    tables : LawTables
    chance : float (n,)
        Of connection; see `connection_chance`.

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
            chance[part],
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
