"""Drawn connections, counts and sites against the law; order; speed of the draws."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from oracles_wiring import cumulative_count, sites_in_turn
from scipy import stats

from circuitgen.core.draws import uniforms
from circuitgen.wiring import (
    PathwayLaws,
    choose_sites,
    draw_synapse_counts,
    evaluate_pairs,
)
from circuitgen.wiring.law import (
    connection_probability,
    expected_synapses,
    synapse_distribution,
)

# Chi-square tests below use fixed seeds and reject at this rate under the law.
FALSE_ALARM = 1e-3


def make_laws(*laws, half_width=0.5):
    """Laws of one presynaptic type onto as many types as there are laws."""
    t0, t1, t2 = (np.array([column]) for column in zip(*laws, strict=True))
    nothing = np.zeros(t0.shape)
    return PathwayLaws(
        t0=t0,
        t1=t1,
        t2=t2,
        t0_low=t0 - half_width,
        t0_high=t0 + half_width,
        recorded=nothing.astype(bool),
        p_ceiling=nothing,
        basis=nothing.astype(str),
        rows=(),
    )


def draw(law, a, pairs_n, seed=1):
    pre = np.arange(pairs_n)
    counts = np.full(pairs_n, a)
    zeros = np.zeros(pairs_n, int)
    return draw_synapse_counts(seed, pre, pre + 7, counts, zeros, make_laws(law))


@pytest.mark.parametrize(
    ("law", "a"),
    [
        ((-1.0, -0.5, 0.0), 1),
        ((-2.0, 0.3, 0.0), 6),
        ((-4.0, 2.0, -0.25), 9),
        ((0.5, -4.2, 0.4), 10),
        ((-31.0, -4.0, 0.0), 1500),
        ((2.0, -9.0, 0.0), 3000),
    ],
)
def test_drawn_counts_follow_the_law(law, a):
    pairs_n = 40_000
    drawn = draw(law, a, pairs_n)
    expected = pairs_n * synapse_distribution(a, *law)
    observed = np.bincount(drawn, minlength=a + 1)
    # Neighbouring counts are joined until each cell expects 20 pairs or more.
    cell = np.minimum(np.floor(np.cumsum(expected) / 20), pairs_n).astype(int)
    expected, observed = (
        np.bincount(cell, values)[np.unique(cell)] for values in (expected, observed)
    )
    if expected[-1] < 20:
        for part in (expected, observed):
            part[-2] += part[-1]
        expected, observed = expected[:-1], observed[:-1]
    assert stats.chisquare(observed, expected).pvalue > FALSE_ALARM


def test_each_count_is_the_inverse_of_the_cumulative_law():
    laws = [(-1.0, 0.4, 0.0), (0.3, -1.5, 0.2), (-5.0, 2.0, -0.1), (4.0, 20.0, 0.0)]
    rng = np.random.default_rng(2)
    pre, post = rng.integers(0, 10_000, (2, 2_000))
    a, pathway = rng.integers(0, 12, 2_000), rng.integers(0, len(laws), 2_000)
    drawn = draw_synapse_counts(5, pre, post, a, pathway, make_laws(*laws))
    uniform = uniforms(5, "connection", pre, post)
    for row in range(2_000):
        law = laws[pathway[row]]
        if not uniform[row, 0] < connection_probability(a[row], *law):
            assert drawn[row] == 0
        else:
            given = synapse_distribution(a[row], np.inf, *law[1:])
            assert drawn[row] == cumulative_count(uniform[row, 1], given)


@pytest.mark.parametrize("t1", [-60.0, -8.0, 0.0, 8.0, 60.0])
@pytest.mark.parametrize("a", [1, 40, 5000])
def test_extreme_laws_draw_what_they_must(t1, a):
    drawn = draw((np.inf, t1, 0.0), a, 300)
    assert drawn.dtype == np.int32
    assert drawn.min() >= 1
    assert drawn.max() <= a
    if abs(t1) == 60:
        assert set(drawn) == {1 if t1 < 0 else a}
    assert not draw((-np.inf, t1, 0.0), a, 300).any()


def test_pairs_without_apposition_are_never_connected():
    laws = make_laws((np.inf, 3.0, 0.0), (900.0, 1.0, 0.3))
    a, pathway = np.zeros(1_000, int), np.arange(1_000) % 2
    pairs = np.arange(1_000)
    assert not draw_synapse_counts(1, pairs, pairs, a, pathway, laws).any()
    found = evaluate_pairs(a, pathway, laws)
    assert not found.p_connect.any()
    assert not found.synapses_expected.any()


def test_draws_depend_on_the_pair_alone():
    laws = make_laws((-1.0, 0.4, 0.0), (0.3, -1.5, 0.2))
    rng = np.random.default_rng(3)
    pairs_n = 40_000
    pre, post = rng.permutation(pairs_n), rng.integers(0, 999, pairs_n)
    a, pathway = rng.integers(1, 14, pairs_n), rng.integers(0, 2, pairs_n)
    whole = draw_synapse_counts(9, pre, post, a, pathway, laws)
    order = rng.permutation(pairs_n)
    columns = [column[order] for column in (pre, post, a, pathway)]
    shuffled = draw_synapse_counts(9, *columns, laws)
    assert shuffled.tolist() == whole[order].tolist()
    # A part has other largest numbers of appositions, so other tables.
    part = slice(100, 131)
    columns = [column[part] for column in (pre, post, a, pathway)]
    assert draw_synapse_counts(9, *columns, laws).tolist() == whole[part].tolist()
    other = draw_synapse_counts(10, pre, post, a, pathway, laws)
    assert (other != whole).any()

    sites = choose_sites(9, pre, post, a, whole)
    by_pair = np.split(sites, np.cumsum(a)[:-1])
    columns = [column[order] for column in (pre, post, a, whole)]
    again = choose_sites(9, *columns)
    assert again.tolist() == np.concatenate([by_pair[i] for i in order]).tolist()


def test_pairs_are_evaluated_as_by_the_law():
    laws = [(-1.0, 0.4, 0.0), (0.3, -1.5, 0.2), (np.inf, 1.0, 0.0)]
    table = make_laws(*laws)
    a, pathway = (part.ravel() for part in np.indices((15, 3)))
    found = evaluate_pairs(a, pathway, table)
    for row, each in enumerate(zip(a, pathway, strict=True)):
        t0, *rest = laws[each[1]]
        p = [connection_probability(each[0], t0 + h, *rest) for h in (0, -0.5, 0.5)]
        assert [part[row] for part in found[:3]] == pytest.approx(p, rel=1e-12)
        expected = expected_synapses(each[0], t0, *rest)
        assert found.synapses_expected[row] == pytest.approx(expected, rel=1e-12)


def test_unknown_intervals_stay_unknown():
    laws = make_laws((-1.0, 0.4, 0.0), half_width=np.nan)
    found = evaluate_pairs([1, 3], [0, 0], laws)
    assert np.isnan(found.p_connect_low).all()
    assert np.isnan(found.p_connect_high).all()
    assert (found.p_connect > 0).all()


def test_every_subset_of_sites_is_equally_likely():
    a, wanted, pairs_n = 6, 3, 20_000
    pre = np.arange(pairs_n)
    sizes = np.full(pairs_n, a), np.full(pairs_n, wanted)
    chosen = choose_sites(4, pre, pre // 3, *sizes).reshape(pairs_n, a)
    assert (chosen.sum(axis=1) == wanted).all()
    codes = chosen @ (1 << np.arange(a))
    subsets = [sum(1 << i for i in c) for c in itertools.combinations(range(a), wanted)]
    observed = [(codes == subset).sum() for subset in subsets]
    assert sum(observed) == pairs_n
    assert stats.chisquare(observed).pvalue > FALSE_ALARM


def test_sites_equal_those_of_the_slow_twin():
    rng = np.random.default_rng(8)
    a = rng.integers(0, 40, 300)
    wanted = rng.integers(0, a + 1)
    pre, post = rng.integers(0, 99_999, (2, 300))
    parts = np.split(choose_sites(3, pre, post, a, wanted), np.cumsum(a)[:-1])
    for row, part in enumerate(parts):
        index = np.arange(10)
        uniform = uniforms(3, "synapse sites", pre[row], post[row], index=index).ravel()
        assert part.tolist() == sites_in_turn(uniform, a[row], wanted[row])
        assert part.sum() == wanted[row]


def test_connection_and_sites_use_other_numbers():
    """The same numbers would tie the place of synapses to whether there are any."""
    first = uniforms(3, "connection", [1, 2], [3, 4])
    second = uniforms(3, "synapse sites", [1, 2], [3, 4])
    assert not np.isin(first, second).any()


def test_no_pairs_give_no_draws():
    laws, none = make_laws((-1.0, 0.4, 0.0)), np.zeros(0, int)
    assert draw_synapse_counts(1, none, none, none, none, laws).shape == (0,)
    assert choose_sites(1, none, none, none, none).shape == (0,)
    assert [part.shape for part in evaluate_pairs(none, none, laws)] == [(0,)] * 4


def test_wrong_arrays_are_refused():
    laws = make_laws((-1.0, 0.4, 0.0))
    for a, pathway in (([1], [1]), ([-1], [0]), ([1], [-1])):
        with pytest.raises(ValueError, match="out of its range"):
            evaluate_pairs(a, pathway, laws)
    with pytest.raises(ValueError, match="arrays"):
        evaluate_pairs([1, 2], [0], laws)
    with pytest.raises(ValueError, match="between 0 and appositions_n"):
        choose_sites(1, [0], [0], [2], [3])
