"""Leaving recordings out: the cavity against a fit without them; plain rules."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import betabinom, binom
from statistics_worlds import make_world

from circuitgen.prediction import check_intervals
from circuitgen.prediction.leave_one_out import score
from circuitgen.prediction.plain_rules import RULES, PlainRule
from circuitgen.wiring import Window, fit_pathways, leave_out, show


@pytest.fixture(scope="module")
def world():
    return make_world(11)


def test_the_cavity_is_close_to_a_fit_without_the_recording(world):
    sets = leave_out(world.is_excitatory, world.home_layer, world.windows, seed=1)
    assert len(sets) == len(world.windows)
    for left in sets[:6]:
        [window] = left.windows
        others = [w for w in world.windows if w is not window]
        fit = fit_pathways(world.is_excitatory, world.home_layer, others, seed=1)
        [(pathway, histogram)] = window.histograms.items()
        code = pathway[0] * 12 + pathway[1]
        wanted = show(fit.draws, {code: histogram}).probability
        values, weight = left.shown[0].probability, left.weight
        order = np.argsort(values)
        found = np.interp([0.25, 0.5, 0.75], np.cumsum(weight[order]), values[order])
        expected = np.quantile(wanted, [0.25, 0.5, 0.75])
        # Four errors of a median of 400 draws are 0.1 of probability, which moves a
        # quartile by half an interquartile range at most.
        allowed = 0.5 * (expected[2] - expected[0]) + 0.01
        assert found == pytest.approx(expected, abs=allowed)


def test_scores_are_those_of_the_distribution():
    distribution = binom.pmf(np.arange(11), 10, 0.3)
    found = score(distribution, 2)
    assert found["log_score"] == pytest.approx(binom.logpmf(2, 10, 0.3))
    place = binom.cdf(1, 10, 0.3) + binom.pmf(2, 10, 0.3) / 2
    assert found["place"] == pytest.approx(place)
    assert found["surprise_p"] == pytest.approx(2 * binom.cdf(2, 10, 0.3))
    assert score(distribution, 10)["surprise_p"] == pytest.approx(2 * 0.3**10)


@pytest.mark.parametrize("rule", RULES)
def test_plain_rules_are_distributions_that_follow_the_others(world, rule):
    windows = world.windows
    classes = [str(place % 2) for place in range(len(windows))]
    found = PlainRule(rule, windows, classes).predict([3], windows[3], classes[3])
    assert found.sum() == pytest.approx(1.0, abs=1e-9)
    assert found.size == windows[3].recording.tested_n + 1
    again = PlainRule(rule, windows, classes).predict(
        list(range(15)), windows[3], classes[3]
    )
    assert (again != found).any()


def test_one_probability_for_all_is_a_random_effect_by_maximum_likelihood(world):
    """A beta-binomial of largest likelihood, on a grid, predicts much the same."""
    windows = world.windows[1:]
    k = np.array([w.recording.connected_n for w in windows])
    n = np.array([w.recording.tested_n for w in windows])
    grid = [
        (betabinom.logpmf(k, n, m * s, (1 - m) * s).sum(), m, s)
        for m in np.linspace(0.05, 0.9, 60)
        for s in np.geomspace(0.5, 60, 60)
    ]
    _, mean, size = max(grid)
    tested = world.windows[0].recording.tested_n
    found = PlainRule(RULES[0], windows, [""] * len(windows)).predict(
        [], world.windows[0], ""
    )
    counts = np.arange(tested + 1)
    wanted = betabinom.pmf(counts, tested, mean * size, (1 - mean) * size)
    # Two families of the same spread: their means agree within a tenth of the range.
    assert found @ counts == pytest.approx(wanted @ counts, abs=0.1 * tested)
    assert np.abs(np.cumsum(found) - np.cumsum(wanted)).max() < 0.1


def test_the_check_says_whether_to_trust_and_names_a_recording_that_disagrees(world):
    report = check_intervals(world.is_excitatory, world.home_layer, world.windows)
    n = len(world.windows)
    assert report["recordings_n"] == n
    assert f"of {n} recordings lie within the 90 % interval" in report["sentence"]
    assert report["gain"] == pytest.approx(
        report["log_score"] - report["log_score_plain"][report["best_plain_rule"]]
    )
    assert 0.7 < report["coverage_90"] <= 1.0
    assert len(report["rows"]) == n


def test_a_recording_that_contradicts_the_others_is_named(world):
    """The rarest connection is said to be found wherever axon and dendrite touch."""
    odd = min(
        world.windows, key=lambda w: w.recording.connected_n / w.recording.tested_n
    )
    always = round(0.98 * odd.ceiling() * 3000)
    changed = odd.recording.model_copy(
        update={
            "tested_n": 3000,
            "connected_n": always,
            "synapses_mean": None,
            "synapses_pairs_n": None,
        }
    )
    windows = [Window(changed, odd.histograms) if w is odd else w for w in world.windows]
    report = check_intervals(world.is_excitatory, world.home_layer, windows)
    assert report["rows"][0]["row"] == changed.row
    # It makes others look odd in turn; it stands first.
    assert changed.row in report["disagree"]
    assert f"disagreeing with the rest: row {changed.row}" in report["sentence"]


def test_with_one_recording_nothing_can_be_left_out(world):
    report = check_intervals(world.is_excitatory, world.home_layer, world.windows[:1])
    assert "fewer than two" in report["sentence"]
