"""Drawn synapses against the law, and their independence of order and blocks.

The chi-square tests run once on a fixed seed; each rejects a right program with
probability 1e-4 had the seed been random.
"""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from oracles_wiring import chosen_sites, synapses_of_pair
from scipy.stats import chisquare

from circuitgen.core.draws import uniforms
from circuitgen.wiring import Law, Laws, choose_sites, drawing, tabulate
from circuitgen.wiring import draw_synapses as draw_numbers
from circuitgen.wiring.kernels import choose, draw_counts
from circuitgen.wiring.law import NEVER, size_distribution

FALSE_ALARM = 1e-4
LAWS = [
    Law(-1.0, 0.2),
    Law(0.5, -1.0, 0.15),
    Law(-2.0, 1.5, -0.2),
    Law(NEVER, 0.3),
]
EXTREME = [
    Law(60.0, -45.0),
    Law(-200.0, 45.0),
    Law(-3.0, -700.0),
    Law(-1e4, 700.0),
    Law(-10.0, 120.0, -6.0),
    Law(30.0, -90.0, 3.0),
]


def _laws(laws):
    """Lay laws side by side, one draw."""
    return Laws(*(np.array([[getattr(x, t) for x in laws]]) for t in ("t0", "t1", "t2")))


def _tables(laws, most):
    return tabulate(_laws(laws), _laws(laws), most)


def draw_synapses(seed, pre, post, a, pathway, tables):
    """Draw pairs that no reciprocity couples."""
    chance = tables.connects[pathway, a]
    return draw_numbers(seed, pre, post, a, pathway, tables, chance)


def _pairs(n, most, pathways, seed=5):
    rng = np.random.default_rng(seed)
    pre, post = rng.permutation(n), rng.integers(0, 500, n)
    return pre, post, rng.integers(0, most + 1, n), rng.integers(0, pathways, n)


def _plain(kernel):
    """Return a kernel as plain Python; it is that already with the compiler off."""
    return getattr(kernel, "py_func", kernel)


def _pooled_chi_square(seen, expected):
    """Chi-square after joining cells expected fewer than five times."""
    big = expected >= 5
    seen = np.append(seen[big], seen[~big].sum())
    expected = np.append(expected[big], expected[~big].sum())
    if expected[-1] < 5:
        seen[-2] += seen[-1]
        expected[-2] += expected[-1]
        seen, expected = seen[:-1], expected[:-1]
    return chisquare(seen, expected * (seen.sum() / expected.sum())).pvalue


@pytest.mark.parametrize("law", LAWS[:3], ids=str)
@pytest.mark.parametrize("a", [1, 4, 12])
def test_drawn_counts_follow_the_law(a, law):
    n = 40_000
    drawn = draw_synapses(
        11,
        np.arange(n),
        np.arange(n) % 97,
        np.full(n, a),
        np.zeros(n, int),
        _tables([law], a),
    )
    expected = n * size_distribution(a, law)
    seen = np.bincount(drawn, minlength=a + 1)
    assert seen.size == a + 1
    assert _pooled_chi_square(seen, expected) > FALSE_ALARM


@pytest.mark.parametrize(("a", "synapses"), [(4, 1), (5, 2), (6, 3), (9, 8)])
def test_every_subset_of_a_size_is_equally_likely(a, synapses):
    n = 300 * math.comb(a, synapses)
    chosen = choose_sites(
        11, np.arange(n), np.arange(n) % 89, np.full(n, a), np.full(n, synapses)
    ).reshape(n, a)
    assert (chosen.sum(axis=1) == synapses).all()
    code = chosen @ (1 << np.arange(a))
    subsets = [
        sum(1 << site for site in subset)
        for subset in itertools.combinations(range(a), synapses)
    ]
    seen = np.array([(code == subset).sum() for subset in subsets])
    assert chisquare(seen).pvalue > FALSE_ALARM


def test_pairs_without_appositions_never_connect():
    pre, post, a, pathway = _pairs(20_000, 3, 4)
    drawn = draw_synapses(3, pre, post, a, pathway, _tables(LAWS, 3))
    assert (drawn[a == 0] == 0).all()
    assert (drawn <= a).all()
    assert (drawn[pathway == 3] == 0).all()
    assert (drawn[(a > 0) & (pathway < 3)] > 0).any()


def test_draws_depend_on_the_pair_alone(monkeypatch):
    pre, post, a, pathway = _pairs(3000, 9, 4)
    tables = _tables(LAWS, 9)
    whole = draw_synapses(3, pre, post, a, pathway, tables)
    order = np.random.default_rng(0).permutation(3000)
    again = draw_synapses(3, pre[order], post[order], a[order], pathway[order], tables)
    np.testing.assert_array_equal(again, whole[order])
    some = slice(1000, 1700)
    part = draw_synapses(3, pre[some], post[some], a[some], pathway[some], tables)
    np.testing.assert_array_equal(part, whole[some])
    monkeypatch.setattr(drawing, "_CHUNK", 7)
    chunked = draw_synapses(3, pre, post, a, pathway, tables)
    np.testing.assert_array_equal(chunked, whole)
    assert (draw_synapses(4, pre, post, a, pathway, tables) != whole).any()


def test_both_cells_of_a_pair_and_their_order_key_its_draw():
    """The two directions are independent: chi-square on a two by two table."""
    pre, post = np.triu_indices(120, 1)
    n, law = pre.size, Law(0.0, -1.0)
    one, tables = np.ones(n, int), _tables([law], 1)
    forth = draw_synapses(3, pre, post, one, one * 0, tables)
    back = draw_synapses(3, post, pre, one, one * 0, tables)
    p = size_distribution(1, law)[1]
    expected = n * np.array([(1 - p) ** 2, p * (1 - p), p * (1 - p), p * p])
    assert chisquare(np.bincount(2 * forth + back), expected).pvalue > FALSE_ALARM
    # 119 pairs share a cell; all alike would have probability below 1e-16.
    assert 0 < forth[pre == 0].mean() < 1
    assert 0 < forth[post == 119].mean() < 1


def test_chosen_sites_depend_on_the_pair_alone():
    pre, post, a, pathway = _pairs(2000, 11, 4)
    synapses = draw_synapses(3, pre, post, a, pathway, _tables(LAWS, 11))
    connected = synapses > 0
    pre, post, a, synapses = (x[connected] for x in (pre, post, a, synapses))
    whole = np.split(choose_sites(3, pre, post, a, synapses), np.cumsum(a)[:-1])
    order = np.random.default_rng(0).permutation(a.size)
    again = choose_sites(3, pre[order], post[order], a[order], synapses[order])
    for pair, sites in zip(
        order, np.split(again, np.cumsum(a[order])[:-1]), strict=True
    ):
        np.testing.assert_array_equal(sites, whole[pair])


def test_no_pairs_give_no_synapses():
    none = np.zeros(0, np.int32)
    assert draw_synapses(3, none, none, none, none, _tables(LAWS, 2)).size == 0
    assert choose_sites(3, none, none, none, none).size == 0


@pytest.mark.parametrize("law", EXTREME, ids=str)
def test_extreme_laws_draw_what_they_say(law):
    most, n = 2000, 400
    a = np.resize([1, 2, 17, most], n)
    drawn = draw_synapses(
        3, np.arange(n), np.arange(n), a, np.zeros(n, int), _tables([law], most)
    )
    draws = uniforms(3, "connection", np.arange(n), np.arange(n))
    by_hand = [synapses_of_pair(*row, law) for row in zip(draws, a, strict=True)]
    np.testing.assert_array_equal(drawn, by_hand)


@pytest.mark.parametrize("compiled", [True, False], ids=["compiled", "plain Python"])
def test_count_kernel_equals_its_twin(compiled):
    _, _, a, pathway = _pairs(1500, 14, 4)
    laws, tables = LAWS, _tables(LAWS, 14)
    uniform = np.random.default_rng(1).uniform(size=(1500, 4))
    # Numbers at the very ends must not run past the last site.
    uniform[:200, 1] = np.nextafter(1.0, 0.0)
    uniform[200:300] = 0.0
    out = np.full(1500, -1, np.int32)
    run = draw_counts if compiled else _plain(draw_counts)
    chance = tables.connects[pathway, a]
    run(uniform, a, pathway, chance, tables.ways, tables.t1, tables.t2, out)
    by_hand = [
        synapses_of_pair(uniform[i], int(a[i]), laws[pathway[i]]) for i in range(1500)
    ]
    np.testing.assert_array_equal(out, by_hand)


@pytest.mark.parametrize("compiled", [True, False], ids=["compiled", "plain Python"])
def test_site_kernel_equals_its_twin(compiled):
    rng = np.random.default_rng(2)
    a = rng.integers(0, 15, 800)
    synapses = rng.integers(0, a + 1)
    uniform = rng.uniform(size=a.sum())
    out = np.zeros(a.sum(), np.bool_)
    (choose if compiled else _plain(choose))(uniform, a, synapses, out)
    first = np.cumsum(a) - a
    for i in range(a.size):
        own = slice(first[i], first[i] + a[i])
        by_hand = chosen_sites(uniform[own], int(a[i]), int(synapses[i]))
        assert np.flatnonzero(out[own]).tolist() == by_hand
        assert len(by_hand) == synapses[i]


def test_tables_hold_the_laws_and_the_spread_of_their_draws():
    laws = LAWS[:2]
    shifts = np.linspace(-1.0, 1.0, 101)
    mean = _laws(laws)
    draws = Laws(*(np.repeat(part, 101, axis=0) for part in (mean.t0, mean.t1, mean.t2)))
    draws = Laws(draws.t0 + shifts[:, None], draws.t1, draws.t2)
    tables = tabulate(mean, draws, 6)
    for row, law in enumerate(laws):
        for a in range(7):
            of_size = size_distribution(a, law)
            s = np.arange(a + 1)
            assert tables.connects[row, a] == pytest.approx(of_size[1:].sum(), rel=1e-12)
            assert tables.expected[row, a] == pytest.approx(of_size @ s, rel=1e-12)
            # P(connected) rises with t0: its 5 and 95 % points are those of t0.
            for name, shift in (("low", -0.9), ("high", 0.9)):
                moved = Law(law.t0 + shift, law.t1, law.t2)
                wanted = size_distribution(a, moved)[1:].sum()
                assert getattr(tables, name)[row, a] == pytest.approx(wanted, rel=1e-9)
