"""Dyads: marginals kept, reciprocals met, both ways drawn together."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq

from circuitgen.spec import Recording
from circuitgen.wiring import (
    Law,
    Laws,
    Window,
    both_probability,
    connection_chance,
    connection_table,
    draw_synapses,
    fit_reciprocity,
    tabulate,
)

P = np.array([0.001, 0.1, 0.5, 0.9, 0.999])


def _laws(*laws):
    return Laws(*(np.array([[getattr(x, t) for x in laws]]) for t in ("t0", "t1", "t2")))


@pytest.mark.parametrize("log_odds", [-6.0, -1.0, 0.0, 1e-9, 0.7, 3.0, 9.0])
def test_the_joint_table_has_the_margins_and_the_odds_ratio(log_odds):
    """The four cells must be a distribution whose cross ratio is the odds ratio."""
    p, q = (part.reshape(-1) for part in np.meshgrid(P, P))
    both = both_probability(p, q, log_odds)
    only_p, only_q = p - both, q - both
    neither = 1 - p - q + both
    assert (np.minimum.reduce([both, only_p, only_q, neither]) > 0).all()
    ratio = np.log(both) + np.log(neither) - np.log(only_p) - np.log(only_q)
    # Cells as small as 1e-9 come from differences of numbers near 1.
    assert ratio == pytest.approx(np.full(p.size, log_odds), abs=1e-5)


def test_independent_ways_multiply():
    assert both_probability(P, P[::-1], 0.0) == pytest.approx(P * P[::-1], rel=1e-14)


def _row(dyads, dyads_n, tested, connected, row=1, pathway=(0, 0)):
    recording = Recording(
        pre_type="a", post_type="b", row=row,
        reciprocal_tested_n=tested, reciprocal_connected_n=connected,
    )  # fmt: skip
    return Window(recording, {pathway: np.array([1.0])}, {pathway: dyads}, dyads_n)


DYADS = np.array([[0, 0, 0, 0], [0, 300, 120, 10], [0, 120, 90, 20], [0, 10, 20, 8]])


def test_a_huge_sample_meets_the_reciprocal_share():
    laws, n = _laws(Law(-1.8, -0.7)), 10_000_000
    table = connection_table(laws, 0, 3)[0]

    def share(log_odds):
        p, q = np.meshgrid(table, table, indexing="ij")
        return (DYADS * both_probability(p, q, log_odds)).sum() / 2000

    wanted = 0.02
    found = fit_reciprocity([_row(DYADS, 2000.0, n, round(n * wanted))], laws, 1)
    expected = brentq(lambda t: share(t) - wanted, -8, 8)
    assert found.log_odds[0, 0] == pytest.approx(expected, abs=1e-3)
    assert found.rows[0].fitted == pytest.approx(wanted, rel=1e-3)
    assert found.rows[0].note == ""


def test_few_reciprocals_leave_the_ratio_near_none_and_uncertain():
    laws = _laws(Law(-1.8, -0.7))
    few = fit_reciprocity([_row(DYADS, 2000.0, 10, 0)], laws, 1)
    many = fit_reciprocity([_row(DYADS, 2000.0, 40000, 700)], laws, 1)
    assert -1.0 < few.log_odds[0, 0] < 0.0
    assert few.sd[0, 0] > 1.0
    assert many.log_odds[0, 0] > 1.0
    assert many.sd[0, 0] < 0.3
    nobody = fit_reciprocity([], laws, 1)
    assert nobody.log_odds[0, 0] == nobody.sd[0, 0] == 0.0


def test_a_share_out_of_reach_is_named_with_the_range():
    laws = _laws(Law(-1.8, -0.7))
    [row] = fit_reciprocity([_row(DYADS, 2000.0, 100, 90)], laws, 1).rows
    assert "out of reach: at most" in row.note


def test_rows_of_single_types_decide_before_groups():
    laws = _laws(*[Law(-1.8, -0.7)] * 4)
    pair = Recording(
        pre_type="a", post_type="g", row=2,
        reciprocal_tested_n=100000, reciprocal_connected_n=2000,
    )  # fmt: skip
    group = Window(
        pair,
        {(0, 0): np.array([1.0]), (0, 1): np.array([1.0])},
        {(0, 0): DYADS, (0, 1): DYADS},
        4000.0,
    )
    own = _row(DYADS, 2000.0, 1000000, 60000)
    found = fit_reciprocity([group, own], laws, 2)
    alone = fit_reciprocity([own], laws, 2)
    assert found.log_odds[0, 0] == pytest.approx(alone.log_odds[0, 0])
    assert found.log_odds[0, 1] == found.log_odds[1, 0] != found.log_odds[0, 0]
    assert found.log_odds[1, 1] == 0.0


def test_drawn_dyads_show_margins_and_reciprocals():
    """100,000 pairs of cells; four standard errors, false alarm 1 in 16,000 each."""
    law, log_odds = Law(-0.5, -0.8), np.array([[1.7]])
    tables = tabulate(_laws(law), _laws(law), 3)
    n = 100_000
    low, high = np.arange(n), np.arange(n) + n
    random = np.random.default_rng(3)
    there, back = random.integers(1, 4, (2, n))

    def reverse(pre, post):
        return np.where(pre < n, there[np.minimum(pre, n - 1)], back[pre - n])

    def drawn(pre, post, a):
        code = np.zeros(n, int)
        chance = connection_chance(5, pre, post, a, code, tables, log_odds, reverse)
        return draw_synapses(5, pre, post, a, code, tables, chance) > 0

    first, second = drawn(low, high, there), drawn(high, low, back)
    p, q = tables.connects[0, there], tables.connects[0, back]
    for seen, chance in ((first, p), (second, q)):
        error = np.sqrt((chance * (1 - chance)).sum())
        assert abs(seen.sum() - chance.sum()) < 4 * error
    both = both_probability(p, q, 1.7)
    error = np.sqrt((both * (1 - both)).sum())
    assert abs((first & second).sum() - both.sum()) < 4 * error
    # Independence would give a fifth less: the check can fail.
    assert both.sum() - (p * q).sum() > 20 * error
