"""Laws of pathways from recordings: whose rows count, what is said about each row."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize, stats

from circuitgen.spec.recordings import Recording
from circuitgen.wiring import fit_pathways, match, moments, wilson_interval
from circuitgen.wiring.law import Histogram
from circuitgen.wiring.likelihood import Datum, fit_jointly

NEAR = np.array([200, 300, 240, 160, 70, 30])
FAR = np.array([900, 60, 30, 8, 2])
WIDE = np.array([100, 90, 80, 70, 60, 50, 40, 30, 20, 10, 5])


def row(**columns):
    return Recording(pre_type="any", post_type="any", **columns)


def fit(excitatory, *rows, whole=WIDE):
    """Fit rows, each a recording with the histograms of its pathways."""
    types = range(len(excitatory))
    windows = {
        (index, *pathway): counts
        for index, (_, histograms) in enumerate(rows)
        for pathway, counts in histograms.items()
    }
    return fit_pathways(
        excitatory,
        [recording for recording, _ in rows],
        [tuple(histograms) for _, histograms in rows],
        windows,
        {(i, j): whole for i in types for j in types},
    )


def law_of(laws, pathway):
    return laws.t0[pathway], laws.t1[pathway], laws.t2[pathway]


@pytest.mark.parametrize("spread", [None, 0.8])
def test_a_single_row_is_met_exactly(spread):
    given = {"tested_n": 40, "connected_n": 9, "synapses_mean": 2.4}
    if spread:
        given |= {"synapses_sd": spread, "synapses_pairs_n": 7}
    laws = fit([True, False], (row(**given), {(0, 1): NEAR}))
    expected = match(NEAR, 9 / 40, 2.4, spread)
    expected = (expected.t0, expected.t1, expected.t2)
    assert law_of(laws, (0, 1)) == pytest.approx(expected, rel=1e-11)
    met = laws.rows[0]
    assert (met.probability, met.synapses_mean) == pytest.approx((0.225, 2.4), rel=1e-12)
    if spread:
        assert met.synapses_sd == pytest.approx(spread, rel=1e-11)
    assert (met.feasible, met.note) == (True, "")
    assert laws.recorded.tolist() == [[False, True], [False, False]]


def test_the_interval_of_a_row_is_that_of_its_counts():
    given = row(tested_n=40, connected_n=9, synapses_mean=2.0)
    laws = fit([True], (given, {(0, 0): NEAR}))
    for t0, bound in zip(
        (laws.t0_low, laws.t0_high), wilson_interval(9, 40), strict=True
    ):
        p = moments(NEAR, t0[0, 0], laws.t1[0, 0]).probability
        assert p == pytest.approx(bound, rel=1e-12)


def test_a_probability_without_counts_is_exact_and_has_no_interval():
    laws = fit([True], (row(probability=0.3, synapses_mean=2.0), {(0, 0): NEAR}))
    p = moments(NEAR, *law_of(laws, (0, 0))).probability
    assert p == pytest.approx(0.3, rel=1e-12)
    assert np.isnan([laws.t0_low[0, 0], laws.t0_high[0, 0]]).all()
    assert laws.recorded[0, 0]


def test_no_connection_among_the_tested_is_information():
    other = row(tested_n=50, connected_n=10, synapses_mean=2.0)
    none = row(tested_n=50, connected_n=0)
    laws = fit([True, True], (none, {(0, 0): NEAR}), (other, {(0, 1): NEAR}))
    assert laws.t0[0, 0] == -np.inf
    assert laws.recorded[0, 0]
    assert laws.rows[0].probability == 0
    high = moments(NEAR, laws.t0_high[0, 0], laws.t1[0, 0]).probability
    assert high == pytest.approx(wilson_interval(0, 50)[1], rel=1e-12)
    # The pool of a class without a single connection still allows some elsewhere.
    laws = fit([True, True], (none, {(0, 0): NEAR}))
    p = moments(NEAR, *law_of(laws, (1, 1))).probability
    assert p == pytest.approx(0.5 / 50, rel=1e-9)


def test_all_of_the_tested_connected_is_met_or_called_infeasible():
    every = row(tested_n=12, connected_n=12)
    touching = np.array([0, 5, 5])
    laws = fit([True, True], (every, {(0, 0): touching}), (every, {(0, 1): NEAR}))
    assert laws.rows[0].feasible
    assert laws.rows[0].probability == 1
    assert not laws.rows[1].feasible
    assert "probability 1 cannot be met" in laws.rows[1].note
    assert laws.rows[1].probability == pytest.approx(0.8, rel=1e-12)
    assert laws.t0[0, 1] == np.inf


def test_several_windows_of_a_pathway_have_the_largest_likelihood():
    """Against a general optimizer that knows only the likelihood."""
    rows = [(60, 21, 2.6, 9), (120, 4, 1.5, 4)]
    given = [
        row(tested_n=n, connected_n=k, synapses_mean=m, synapses_pairs_n=pairs_n)
        for n, k, m, pairs_n in rows
    ]
    laws = fit([True], (given[0], {(0, 0): NEAR}), (given[1], {(0, 0): FAR}))

    def loss(parameters):
        value = 0.0
        for (n, k, m, pairs_n), counts in zip(rows, (NEAR, FAR), strict=True):
            now = moments(counts, *parameters)
            # A spread that was not recorded counts as that of a Poisson number.
            error = np.sqrt(m / pairs_n)
            value -= stats.binom.logpmf(k, n, now.probability)
            value -= stats.norm.logpdf(m, now.synapses_mean, error)
        return value

    options = {"xatol": 1e-9, "fatol": 1e-13, "maxiter": 4000}
    best = optimize.minimize(loss, [-1.0, 0.0], method="Nelder-Mead", options=options)
    found = law_of(laws, (0, 0))
    assert found[2] == 0
    assert loss(found[:2]) <= best.fun + 1e-11
    # A loss off by 1e-13 leaves parameters off by about 1e-6.
    assert found[:2] == pytest.approx(best.x, abs=1e-5)


def test_windows_of_huge_samples_recover_the_law():
    truth = (-2.2, 0.6)
    rows = []
    for counts in (NEAR, FAR):
        now = moments(counts, *truth)
        n = 10**9
        given = row(
            tested_n=n,
            connected_n=round(n * now.probability),
            synapses_mean=now.synapses_mean,
        )
        rows.append((given, {(0, 0): counts}))
    laws = fit([True], *rows)
    # Rounding k moves p by 5e-10, and t0 by less than that over p (1 - p) > 0.02.
    assert law_of(laws, (0, 0)) == pytest.approx((*truth, 0.0), abs=3e-8)


@pytest.mark.parametrize("n", [10**3, 10**6, 10**9])
def test_largest_likelihood_of_one_row_is_its_exact_match(n):
    p, mean = 0.24, 2.1
    datum = Datum(Histogram.of(NEAR), n, n * p, mean, np.sqrt(mean / (n * p)))
    expected = match(NEAR, p, mean)
    assert fit_jointly([datum]) == pytest.approx((expected.t0, expected.t1), abs=1e-9)


def test_spreads_of_several_windows_are_met_on_average():
    given = [
        row(
            tested_n=n,
            connected_n=k,
            synapses_mean=m,
            synapses_sd=sd,
            synapses_pairs_n=8,
        )
        for n, k, m, sd in [(60, 21, 2.6, 0.8), (120, 4, 1.6, 0.6)]
    ]
    laws = fit([True], (given[0], {(0, 0): NEAR}), (given[1], {(0, 0): FAR}))
    squares = [
        moments(counts, *law_of(laws, (0, 0))).synapses_sd ** 2 for counts in (NEAR, FAR)
    ]
    assert np.mean(squares) == pytest.approx((0.8**2 + 0.6**2) / 2, rel=1e-8)
    assert laws.t2[0, 0] != 0


def test_rows_of_groups_set_the_law_of_members_without_their_own():
    own = row(tested_n=30, connected_n=12, synapses_mean=2.0)
    group = row(tested_n=90, connected_n=18, synapses_mean=1.8)
    histograms = {(0, 0): NEAR, (0, 1): FAR, (0, 2): WIDE}
    laws = fit([True] * 3, (own, {(0, 0): NEAR}), (group, histograms))
    assert law_of(laws, (0, 0))[:2] == pytest.approx(
        (match(NEAR, 0.4, 2.0).t0, match(NEAR, 0.4, 2.0).t1)
    )
    summed = WIDE.copy()
    summed[: FAR.size] += FAR
    shared = match(summed, 0.2, 1.8)
    for pathway in ((0, 1), (0, 2)):
        expected = (shared.t0, shared.t1, shared.t2)
        assert law_of(laws, pathway) == pytest.approx(expected, rel=1e-11)
        assert laws.recorded[pathway]
        assert laws.basis[pathway] == "recordings of groups"
    assert "1 of its 3 pathways have recordings of their own" in laws.rows[1].note
    # The row's own fitted value covers all three pathways, each under its law.
    connected = NEAR.sum() * 0.4 + summed.sum() * 0.2
    share = connected / (NEAR.sum() + summed.sum())
    assert laws.rows[1].probability == pytest.approx(share, rel=1e-12)


def test_unrecorded_pathways_take_the_law_of_their_class():
    excitatory = [True, True, False, False]
    rows = [
        (row(tested_n=50, connected_n=5, synapses_mean=3.0), {(0, 1): WIDE}),
        (row(tested_n=50, connected_n=25, synapses_mean=4.0), {(2, 0): WIDE}),
        (row(tested_n=50, connected_n=35, synapses_mean=4.0), {(3, 1): WIDE}),
    ]
    laws = fit(excitatory, *rows)
    # The likelihood of one row is largest at its exact match.
    p, mean, t = 0.1, 3.0, law_of(laws, (1, 1))
    now = moments(WIDE, *t)
    assert (now.probability, now.synapses_mean) == pytest.approx((p, mean), rel=1e-9)
    # Two rows of equal size and window: their mean.
    now = moments(WIDE, *law_of(laws, (2, 1)))
    assert now.probability == pytest.approx(0.6, rel=1e-9)
    assert laws.basis[2, 1] == "pooled over inhibitory to excitatory"
    # No row of the class at all.
    assert laws.basis[2, 3] == "pooled over all pathways"
    assert law_of(laws, (2, 3)) == law_of(laws, (0, 2))
    assert not laws.recorded[2, 1]
    assert np.isnan(laws.t0_low[2, 1])


def test_missing_numbers_of_synapses_are_pooled_and_said_to_be():
    excitatory = [True, False]
    rows = [
        (row(tested_n=50, connected_n=5), {(0, 0): WIDE}),
        (row(tested_n=50, connected_n=25, synapses_mean=4.0), {(1, 0): WIDE}),
    ]
    laws = fit(excitatory, *rows)
    # None in the class, so that of all rows.
    assert laws.t1[0, 0] == pytest.approx(laws.t1[0, 1], rel=1e-12)
    assert "no number of synapses recorded: t1 pooled" in laws.rows[0].note
    assert moments(WIDE, *law_of(laws, (0, 0))).probability == pytest.approx(0.1)
    # None anywhere: largest entropy with the probability alone.
    laws = fit(excitatory, rows[0])
    assert not laws.t1.any()


def test_synapses_without_a_probability_take_the_class_probability():
    rows = [
        (row(tested_n=50, connected_n=5, synapses_mean=2.0), {(0, 0): WIDE}),
        (row(synapses_mean=3.5, synapses_sd=1.2), {(0, 1): WIDE}),
    ]
    laws = fit([True, True], *rows)
    now = moments(WIDE, *law_of(laws, (0, 1)))
    assert now.synapses_mean == pytest.approx(3.5, rel=1e-6)
    assert now.synapses_sd == pytest.approx(1.2, rel=1e-6)
    assert not laws.recorded[0, 1]
    assert laws.basis[0, 1].startswith("synapses from its recordings, probability")


def test_audit_rows_do_not_touch_the_fit():
    fitted = row(tested_n=50, connected_n=5, synapses_mean=2.0)
    kept = row(tested_n=80, connected_n=60, use="audit")
    alone = fit([True], (fitted, {(0, 0): WIDE}))
    both = fit([True], (fitted, {(0, 0): WIDE}), (kept, {(0, 0): NEAR}))
    assert law_of(alone, (0, 0)) == law_of(both, (0, 0))
    assert "kept out of the fit" in both.rows[1].note
    expected = moments(NEAR, *law_of(both, (0, 0))).probability
    assert both.rows[1].probability == pytest.approx(expected, rel=1e-12)


def test_windows_without_pairs_or_appositions_say_so_and_set_no_law():
    given = row(tested_n=50, connected_n=5)
    good = row(tested_n=50, connected_n=10, synapses_mean=2.0)
    laws = fit(
        [True, True],
        (given, {(0, 0): np.zeros(3)}),
        (given, {(0, 1): np.array([70])}),
        (good, {(1, 1): WIDE}),
    )
    assert "the circuit has no such pair" in laws.rows[0].note
    assert np.isnan(laws.rows[0].probability)
    assert "no such pair of the circuit has an apposition" in laws.rows[1].note
    assert laws.rows[1].probability == 0
    assert not laws.rows[0].feasible
    assert not laws.rows[1].feasible
    assert not laws.recorded[0].any()
    assert law_of(laws, (0, 0)) == law_of(laws, (0, 1))


def test_rows_that_disagree_are_said_to_disagree():
    few = row(tested_n=400, connected_n=8, synapses_mean=2.0)
    many = row(tested_n=400, connected_n=200)
    laws = fit([True], (few, {(0, 0): NEAR}), (many, {(0, 0): NEAR}))
    for met in laws.rows:
        assert met.feasible
        assert "other recordings of the same pathways disagree" in met.note
        assert met.probability == pytest.approx(208 / 800, rel=1e-9)


def test_without_recordings_every_subset_is_equally_likely():
    laws = fit([True, False])
    assert not np.any([laws.t0, laws.t1, laws.t2])
    assert not laws.recorded.any()
    assert (laws.basis == "no recordings: every subset equally likely").all()
    assert laws.rows == ()


def test_the_ceiling_is_the_share_of_pairs_that_touch():
    laws = fit_pathways([True, True], [], [], {}, {(0, 1): NEAR, (1, 0): np.zeros(2)})
    assert laws.p_ceiling[0, 1] == pytest.approx(0.8, rel=1e-15)
    assert np.isnan(laws.p_ceiling[[0, 1, 1], [0, 0, 1]]).all()


def test_the_order_of_recordings_does_not_change_a_law():
    rows = [
        (row(tested_n=50, connected_n=5, synapses_mean=2.0), {(0, 0): WIDE}),
        (row(tested_n=60, connected_n=21, synapses_mean=2.6), {(0, 1): NEAR}),
        (row(tested_n=90, connected_n=3, synapses_mean=1.5), {(0, 1): FAR}),
    ]
    forth, back = fit([True, True], *rows), fit([True, True], *rows[::-1])
    for name in ("t0", "t1", "t2"):
        there, here = getattr(forth, name), getattr(back, name)
        assert there == pytest.approx(here, rel=1e-9)
