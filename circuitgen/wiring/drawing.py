"""From laws to a circuit: keyed draws, pair by pair."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import expit, logit

from circuitgen.core.draws import uniforms
from circuitgen.wiring import kernels
from circuitgen.wiring.law import connection_probability, count_moments, log_ways
from circuitgen.wiring.laws import Laws, connection_table
from circuitgen.wiring.reciprocity import Reciprocity, margin

_CHUNK = 1 << 20
_DRAWS = 4
# The 90 % interval.
INTERVAL = (0.05, 0.95)


@dataclass(frozen=True)
class LawTables:
    """What the laws say for every number of appositions, tabulated.

    Arrays by (pathway, appositions): `connects` P(connected), `low` and `high` its
    posterior 5 and 95 % points, `expected` synapses, `ways` S_a. By pathway: t0, t1, t2.
    """

    connects: np.ndarray
    low: np.ndarray
    high: np.ndarray
    expected: np.ndarray
    ways: np.ndarray
    t0: np.ndarray
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
        t0=laws.t0[0],
        t1=laws.t1[0],
        t2=laws.t2[0],
    )


@dataclass(frozen=True)
class PairChances:
    """What the laws say of pairs, (n,) each.

    `probability` of connection, its `low` and `high` point, `expected` synapses, and
    `chance`: that to connect given what the lower cell id's direction does.
    """

    probability: np.ndarray
    low: np.ndarray
    high: np.ndarray
    expected: np.ndarray
    chance: np.ndarray


def pair_chances(
    seed,
    pre,
    post,
    appositions,
    pathway,
    tables: LawTables,
    reciprocity: Reciprocity,
    reverse,
) -> PairChances:
    """Return what the laws say of pairs, coupled to their reverse where that is known.

    The direction from the lower cell id is drawn by its probability, the other given
    the outcome; both by draws keyed by their own ids, so that neither blocks nor order
    matter.

    Parameters
    ----------
    seed, pre, post, appositions, pathway, tables
        As in `draw_synapses`.
    reciprocity : Reciprocity
    reverse : callable
        Gives the appositions of ordered pairs (pre, post) of coupled types.
    """
    place = (pathway, appositions)
    probability, low, high, expected = (
        part[place]
        for part in (tables.connects, tables.low, tables.high, tables.expected)
    )
    chance = probability.copy()
    types_n = reciprocity.log_ratio.shape[0]
    from_type, to_type = np.divmod(pathway, types_n)
    ratio = reciprocity.log_ratio[from_type, to_type]
    coupled = np.flatnonzero((ratio != 0.0) & (pre != post))
    if coupled.size:
        ratio, code = ratio[coupled], pathway[coupled]
        back = to_type[coupled] * types_n + from_type[coupled]
        a, b = appositions[coupled], reverse(post[coupled], pre[coupled])
        shift = reciprocity.shift
        odds = tables.t0[code] + tables.ways[code, a] + shift[code]
        other = tables.t0[back] + tables.ways[back, b] + shift[back]
        synapses = expected[coupled] / np.maximum(probability[coupled], 1e-300)
        moved = margin(odds, other, ratio)
        for bound in (low, high):
            with np.errstate(divide="ignore", invalid="ignore"):
                away = logit(bound[coupled]) - logit(probability[coupled])
                bound[coupled] = expit(logit(moved) + np.nan_to_num(away, nan=0.0))
        probability[coupled], expected[coupled] = moved, moved * synapses
        later = pre[coupled] > post[coupled]
        first = margin(other, odds, ratio)
        drawn = uniforms(seed, "connection", post[coupled], pre[coupled])[:, 0]
        given = expit(odds + ratio * (drawn < first))
        chance[coupled] = np.where(later, given, moved)
    return PairChances(probability, low, high, expected, chance)


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
        Of connection; see `pair_chances`.

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
