"""The row test: false alarms at the nominal rate, power as promised, references."""

from __future__ import annotations

import numpy as np
import pytest
from builders_audit import NAMES, circuit_of, random_circuit, row
from scipy.stats import beta, binom, kstest, ttest_ind_from_stats
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.proportion import proportion_confint

from circuitgen.audit import audit, overall
from circuitgen.audit.row_tests import (
    Shares,
    detectable_ratio,
    mean_p_value,
    place_of,
    ratio_interval,
    two_sided,
)
from circuitgen.core.errors import InputError


def test_places_of_recordings_from_the_same_law_are_uniform():
    """2,000 circuits and recordings; Kolmogorov and Smirnov's test at 1 in 1,000.

    Discreteness is taken out by a uniform share of the count's own probability.
    """
    random = np.random.default_rng(6)
    rows = 2000
    p = random.beta(1.2, 4.0, rows)
    total, n = random.integers(200, 4000, rows), random.integers(10, 150, rows)
    found, k = random.binomial(total, p), random.binomial(n, p)
    share, places, alarms = random.random(rows), np.zeros(rows), 0
    for i in range(rows):
        expected = Shares(int(found[i]), int(total[i])).predictive(int(n[i]))
        places[i] = expected.cdf(k[i] - 1) + share[i] * expected.pmf(k[i])
        alarms += two_sided(place_of(k[i], expected)) < 0.05
    assert kstest(places, "uniform").pvalue > 1e-3
    # Mid-p-values: the nominal rate on average; four binomial standard deviations.
    assert abs(alarms / rows - 0.05) < 4 * np.sqrt(0.05 * 0.95 / rows)


def test_clustered_recordings_do_not_raise_the_false_alarms():
    """Cells differ in how much they send; eight cells a cluster are recorded at once.

    1,000 recordings from such tissue. Without the design effect the rate is well above
    the nominal (by six standard deviations); with it it is nominal within four.
    """
    random = np.random.default_rng(9)
    n = 400

    def tissue():
        out = random.lognormal(0.0, 0.9, n)
        return random.random((n, n)) < np.clip(0.12 * out / out.mean(), 0, 0.9)[:, None]

    circuit = circuit_of(tissue())
    # A circuit of so many cells has a share of its own: the tissue's is made the same.
    [clustered] = audit(circuit, [row(1, 20, 168, cluster_size=8)])
    assert clustered.design_effect > 1.5
    other, alarms = tissue(), {1.0: 0, clustered.design_effect: 0}
    for _ in range(1000):
        k = 0
        for _ in range(3):
            cells = random.choice(n, 8, replace=False)
            k += int(other[np.ix_(cells, cells)].sum()) - int(other[cells, cells].sum())
        share = other.sum() - np.trace(other)
        for effect in alarms:
            expected = Shares(int(share), n * (n - 1), effect).predictive(168)
            alarms[effect] += two_sided(place_of(k, expected)) < 0.05
    plain, corrected = alarms.values()
    assert plain / 1000 > 0.05 + 6 * np.sqrt(0.05 * 0.95 / 1000)
    assert corrected / 1000 < 0.05 + 4 * np.sqrt(0.05 * 0.95 / 1000)


def test_a_doubled_probability_is_found_as_often_as_promised():
    """Power at the promised ratio, by 2,000 recordings: four standard deviations."""
    shares, n, level = Shares(3000, 30_000), 120, 0.05
    ratio = detectable_ratio(shares, n, level)
    assert 1.5 < ratio < 2.5
    random = np.random.default_rng(2)
    k = random.binomial(n, ratio * shares.p, 2000)
    expected = shares.predictive(n)
    found = np.mean([two_sided(place_of(x, expected)) < level for x in k])
    assert abs(found - 0.8) < 4 * np.sqrt(0.8 * 0.2 / 2000) + 0.02  # level is discrete
    assert detectable_ratio(Shares(2900, 3000), 20, level) is None
    assert detectable_ratio(Shares(300, 30_000), 5, level) > 10


def test_with_a_large_circuit_the_predictive_is_binomial():
    expected = Shares(20_000_000, 100_000_000).predictive(80)
    counts = np.arange(81)
    assert expected.pmf(counts) == pytest.approx(binom.pmf(counts, 80, 0.2), abs=1e-5)


def test_ratios_have_the_exact_interval():
    """Clopper & Pearson's bounds from statsmodels."""
    shares = Shares(250, 1000)
    ratio, low, high = ratio_interval(shares, 12, 32)
    bounds = proportion_confint(12, 32, 0.05, method="beta")
    assert (ratio, low, high) == pytest.approx(
        (0.25 / (12 / 32), 0.25 / bounds[1], 0.25 / bounds[0])
    )
    assert ratio_interval(shares, 0, 23)[0] == np.inf
    # 0 of 23: 0 to 14.82 %, as printed for that sample (exact interval).
    assert ratio_interval(shares, 0, 23)[1] == pytest.approx(0.25 / 0.1482, rel=1e-3)
    wide = ratio_interval(Shares(250, 1000, 4.0), 12, 32)
    assert wide[1:] == pytest.approx(
        (0.25 / beta.ppf(0.975, 4, 5), 0.25 / beta.ppf(0.025, 3, 6))
    )


def test_means_are_compared_as_scipy_does():
    found = mean_p_value(3.4, 1.0, 11, 2.9, 1.2, 400)
    wanted = ttest_ind_from_stats(
        3.4, np.sqrt(1.0), 11, 2.9, 1.2, 400, equal_var=False
    ).pvalue
    assert found == pytest.approx(wanted, rel=1e-9)


def test_q_values_are_those_of_statsmodels_and_decide_the_verdict():
    random = np.random.default_rng(3)
    circuit = random_circuit(random, 300, 0.2)
    counts = [(20, 100), (40, 100), (19, 90), (2, 80), (30, 150), (1, 5), (18, 100)]
    judged = audit(circuit, [row(i, k, n) for i, (k, n) in enumerate(counts, 1)])
    wanted = multipletests([j.p_value for j in judged], 0.05, method="fdr_bh")[1]
    assert [j.q_value for j in judged] == pytest.approx(wanted.tolist())
    verdicts = [j.verdict for j in judged]
    assert verdicts == [
        "agrees", "too low", "agrees", "too high", "agrees", "cannot tell", "agrees",
    ]  # fmt: skip
    total = overall(judged)
    assert (total["agree"], total["disagree"], total["cannot_tell"]) == (4, 2, 1)
    assert total["expected_false_alarms"] == pytest.approx(0.1)


def test_windows_groups_and_reciprocals_are_counted_as_by_hand():
    random = np.random.default_rng(5)
    n = 60
    place = random.uniform(0, 200, (n, 3))
    types = np.repeat([0, 1], [35, 25])
    matrix = random.random((n, n)) < 0.3
    np.fill_diagonal(matrix, False)
    circuit = circuit_of(matrix, types, place)
    away = np.linalg.norm(place[:, None] - place[None], axis=2)
    lateral = np.linalg.norm(place[:, None, :2] - place[None, :, :2], axis=2)
    off = ~np.eye(n, dtype=bool)
    members = {"a": types == 0, "b": types == 1, "both": types >= 0}
    cases = [
        ("a", "b", 0, 120, "soma"), ("b", "a", 50, 150, "lateral"),
        ("both", "a", 0, 90, "soma"), ("a", "a", 0, 100, "soma"),
    ]  # fmt: skip
    for number, (pre, post, low, high, kind) in enumerate(cases, 1):
        recording = row(
            number, 3, 20, pre_type=pre, post_type=post, distance_low_um=low,
            distance_high_um=high, distance_kind=kind, reciprocal_tested_n=10,
            reciprocal_connected_n=1,
        )  # fmt: skip
        distance = away if kind == "soma" else lateral
        window = off & (distance >= low) & (distance <= high)
        window &= members[pre][:, None] & members[post][None]
        share, both = audit(circuit, [recording])
        assert share.circuit == pytest.approx(matrix[window].mean())
        dyads = {tuple(sorted(pair)) for pair in zip(*np.nonzero(window), strict=True)}
        wanted = np.mean([matrix[i, j] and matrix[j, i] for i, j in dyads])
        assert both.measure == "reciprocal share"
        assert both.circuit == pytest.approx(wanted)


def test_synapse_numbers_need_synapses():
    random = np.random.default_rng(5)
    matrix = random.random((80, 80)) < 0.3
    np.fill_diagonal(matrix, False)
    synapses = random.integers(1, 6, matrix.sum())
    told = row(1, synapses_mean=3.1, synapses_sd=1.0, synapses_pairs_n=20)
    [judged] = audit(circuit_of(matrix, synapses=synapses), [told])
    assert judged.circuit == pytest.approx(synapses.mean())
    assert judged.verdict == "agrees"
    off = row(2, synapses_mean=5.5, synapses_sd=1.0, synapses_pairs_n=20)
    [judged] = audit(circuit_of(matrix, synapses=synapses), [off])
    assert judged.verdict == "too low"
    [judged] = audit(circuit_of(matrix), [told])
    assert judged.verdict == "cannot tell"
    assert "no synapse numbers" in judged.note


def test_rows_that_cannot_be_tested_say_why():
    circuit = random_circuit(np.random.default_rng(1), 30, 0.2)
    [bare] = audit(circuit, [row(1, probability=0.2)])
    assert (bare.verdict, bare.p_value) == ("cannot tell", None)
    assert "without counts" in bare.note
    [cut] = audit(circuit, [row(1, 3, 10, slice_thickness_um=300)])
    assert "slices need a run" in cut.note
    assert NAMES == circuit.type_names
    with pytest.raises(InputError, match="needs the places of the somata"):
        audit(circuit, [row(1, 3, 10, distance_high_um=100)])
