"""Dyads: marginals kept, reciprocals met, both ways drawn together."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import logit

from circuitgen.spec import Recording
from circuitgen.wiring import (
    Law,
    Laws,
    Reciprocity,
    Window,
    both_probability,
    draw_synapses,
    fit_reciprocity,
    pair_chances,
    tabulate,
)
from circuitgen.wiring.reciprocity import margin

ODDS = np.array([-7.0, -2.2, 0.0, 2.2, 7.0])


def _laws(*laws):
    return Laws(*(np.array([[getattr(x, t) for x in laws]]) for t in ("t0", "t1", "t2")))


@pytest.mark.parametrize("log_ratio", [-6.0, -1.0, 0.0, 0.7, 3.0, 9.0])
def test_the_joint_table_is_the_dyad_models(log_ratio):
    """Weights 1, e^L, e^L' and e^(L + L' + t_r), summed by hand."""
    for first in ODDS:
        for second in ODDS:
            weights = np.exp([0, first, second, first + second + log_ratio])
            _, one, other, both = weights / weights.sum()
            found = both_probability(first, second, log_ratio)
            assert found == pytest.approx(both, rel=1e-12)
            assert margin(first, second, log_ratio) == pytest.approx(one + both)
            assert margin(second, first, log_ratio) == pytest.approx(other + both)


def test_a_direction_without_appositions_never_connects():
    assert margin(-np.inf, 1.0, 2.0) == 0.0
    assert margin(0.4, -np.inf, 2.0) == pytest.approx(1 / (1 + np.exp(-0.4)))
    assert both_probability(0.4, -np.inf, 2.0) == 0.0


def _row(dyads, dyads_n, tested, connected, row=1, pathway=(0, 0)):
    recording = Recording(
        pre_type="a", post_type="b", row=row,
        reciprocal_tested_n=tested, reciprocal_connected_n=connected,
    )  # fmt: skip
    return Window(recording, {pathway: np.array([1.0])}, {pathway: dyads}, dyads_n)


DYADS = np.array(
    [[0, 190, 60, 6], [180, 300, 120, 10], [70, 120, 90, 20], [4, 10, 20, 8]]
)


def _shown(law, log_ratio, shift):
    """Mean of the two margins and the reciprocal share, pair by pair."""
    margins = both = 0.0
    for (a, b), n in np.ndenumerate(DYADS):
        odds = [
            law.t0 + shift + np.log(np.expm1(x * np.log1p(np.exp(law.t1))))
            if x
            else -np.inf
            for x in (a, b)
        ]
        weights = np.exp([0, odds[0], odds[1], odds[0] + odds[1] + log_ratio])
        _, one, other, twice = weights / weights.sum()
        margins += n * (one + other + 2 * twice) / 2
        both += n * twice
    return margins / 2000, both / 2000


@pytest.mark.parametrize("wanted", [0.004, 0.02, 0.04])
def test_a_huge_sample_meets_the_reciprocal_share_and_keeps_the_margin(wanted):
    law, n = Law(-1.8, -0.7), 10_000_000
    row = _row(DYADS, 2000.0, n, round(n * wanted))
    found = fit_reciprocity([row], _laws(law), 1)
    before, _ = _shown(law, 0.0, 0.0)
    margins, both = _shown(law, found.log_ratio[0, 0], found.shift[0])
    assert margins == pytest.approx(before, rel=1e-9)
    assert both == pytest.approx(wanted, rel=2e-3)
    assert found.rows[0].fitted == pytest.approx(both, rel=1e-9)
    assert found.rows[0].note == ""


def test_few_reciprocals_leave_the_ratio_near_none_and_uncertain():
    laws = _laws(Law(-1.8, -0.7))
    few = fit_reciprocity([_row(DYADS, 2000.0, 10, 0)], laws, 1)
    many = fit_reciprocity([_row(DYADS, 2000.0, 40000, 700)], laws, 1)
    assert -1.0 < few.log_ratio[0, 0] < 0.0
    assert few.sd[0, 0] > 1.0
    assert many.log_ratio[0, 0] > 1.0
    assert many.sd[0, 0] < 0.3
    nobody = fit_reciprocity([], laws, 1)
    assert nobody.log_ratio[0, 0] == nobody.sd[0, 0] == 0.0


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
    assert found.log_ratio[0, 0] == pytest.approx(alone.log_ratio[0, 0])
    assert found.log_ratio[0, 1] == found.log_ratio[1, 0] != found.log_ratio[0, 0]
    assert found.log_ratio[1, 1] == 0.0


def test_drawn_dyads_show_margins_and_reciprocals():
    """100,000 pairs of cells; four standard errors, false alarm 1 in 16,000 each."""
    law, n = Law(-0.5, -0.8), 100_000
    tables = tabulate(_laws(law), _laws(law), 3)
    coupled = Reciprocity(np.array([[1.7]]), np.zeros((1, 1)), np.array([-0.6]), ())
    low, high = np.arange(n), np.arange(n) + n
    random = np.random.default_rng(3)
    there, back = random.integers(0, 4, (2, n))

    def reverse(pre, post):
        return np.where(pre < n, there[np.minimum(pre, n - 1)], back[pre - n])

    def drawn(pre, post, a):
        keyed = (5, pre, post, a, np.zeros(n, int), tables)
        chances = pair_chances(*keyed, coupled, reverse)
        return draw_synapses(*keyed, chances.chance) > 0, chances

    (first, one), (second, other) = drawn(low, high, there), drawn(high, low, back)
    for seen, chances in ((first, one), (second, other)):
        p = chances.probability
        assert (chances.low <= p + 1e-12).all()
        assert (p <= chances.high + 1e-12).all()
        error = np.sqrt((p * (1 - p)).sum())
        assert abs(seen.sum() - p.sum()) < 4 * error
        plain = tables.connects[0, there if seen is first else back]
        assert chances.expected[p > 0] / p[p > 0] == pytest.approx(
            tables.expected[0, there if seen is first else back][p > 0] / plain[p > 0]
        )
    assert not first[there == 0].any()
    odds, also = (logit(tables.connects[0, a]) - 0.6 for a in (there, back))
    both = both_probability(odds, also, 1.7)
    error = np.sqrt((both * (1 - both)).sum())
    assert abs((first & second).sum() - both.sum()) < 4 * error
    # Drawn apart there would be far fewer: the check can fail.
    assert both.sum() - (one.probability * other.probability).sum() > 20 * error
