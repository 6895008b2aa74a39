"""The pooled fit: against exact matches, its prior, and weighted draws of the prior."""

from __future__ import annotations

import numpy as np
import pytest

from circuitgen.spec import Recording
from circuitgen.wiring import Law, Window, fit_pathways, moments, show
from circuitgen.wiring.laws import laws_of
from circuitgen.wiring.prior import SPREAD_SCALES, make_design, make_priors

NEAR = np.array([20, 30, 25, 15, 8, 2])
FAR = np.array([80, 12, 5, 3])
SIGNS, HOMES = (True, True, False), (0, 1, 0)


def _window(row, histograms, **measured):
    recording = Recording.model_construct(
        **(Recording(pre_type="a", post_type="b", row=row, **measured).model_dump())
    )
    return Window(recording, {p: np.asarray(h) for p, h in histograms.items()})


def _one(row, histogram, pathway=(0, 0), **measured):
    return _window(row, {pathway: histogram}, **measured)


def _fit(windows, totals=(), **options):
    return fit_pathways(SIGNS, HOMES, windows, totals, **options)


def _exact_rows():
    """Counts of huge samples from known laws, on three pathways."""
    truths = {(0, 0): Law(-1.5, -0.6), (0, 2): Law(-0.4, 0.2), (2, 1): Law(-3.0, 0.9)}
    rows, n = [], 1_000_000
    for row, (pathway, law) in enumerate(truths.items(), start=1):
        got = moments(NEAR, law)
        rows.append(
            _one(
                row,
                NEAR,
                pathway,
                tested_n=n,
                connected_n=round(n * got.probability),
                synapses_mean=got.mean,
                synapses_pairs_n=n,
            )
        )
    return truths, rows


def test_with_huge_samples_the_fit_is_the_exact_match():
    truths, rows = _exact_rows()
    fit = _fit(rows)
    for (pre, post), law in truths.items():
        wanted = moments(NEAR, law)
        for laws in (fit.laws, fit.draws):
            got = show(laws, {3 * pre + post: NEAR})
            # Sampling errors of a million pairs: 0.0005 in p and less in the mean; 400
            # draws stay within five of them but once in 4,000 such tests.
            assert got.probability == pytest.approx(wanted.probability, abs=2.5e-3)
            assert got.mean == pytest.approx(wanted.mean, abs=6e-3)
    middle = show(fit.draws, {0: NEAR}).probability.std()
    p = moments(NEAR, truths[0, 0]).probability
    # The draws' own spread is the sampling error; that of 400 draws is known to 4 %,
    # five times which is allowed.
    assert middle == pytest.approx(np.sqrt(p * (1 - p) / 1e6), rel=0.2)


def test_without_recordings_the_draws_are_the_priors():
    fit = _fit([], seed=3)
    assert "no recording enters the fit" in fit.warnings[0]
    assert not fit.recorded.any()
    design = make_design(SIGNS, HOMES)
    five = np.zeros(6)
    five[5] = 1.0
    for code in range(9):
        p = show(fit.draws, {code: five}).probability
        eta = np.log(p) - np.log1p(-p)
        priors = make_priors(design, SPREAD_SCALES)
        # E of a squared half-normal is its squared scale: spreads add their scales.
        variance = (priors[0].features[code] ** 2).sum() + priors[0].own ** 2
        n = eta.size
        # 4.5 standard errors; false alarm 1 in 15,000 for each of the 18 checks. The
        # mixture over spreads has heavier tails than a normal: kurtosis up to 4.
        assert eta.mean() == pytest.approx(
            priors[0].mean[code], abs=4.5 * np.sqrt(variance / n)
        )
        assert eta.var() == pytest.approx(variance, rel=4.5 * np.sqrt(3.0 / n))


def _weighted_prior(windows, draws_n=400_000):
    """Draw laws from the prior and weigh them by the binomial likelihood: no Laplace."""
    random = np.random.default_rng(12)
    design = make_design(SIGNS, HOMES)
    spreads = np.abs(random.standard_normal((draws_n, 6))) * SPREAD_SCALES
    parts = []
    unit = make_priors(design, np.ones(6))
    for kind in range(2):
        prior, own = unit[kind], spreads[:, 3 * kind : 3 * kind + 3]
        common = random.standard_normal((draws_n, prior.features.shape[1]))
        common[:, 5:8] *= own[:, :1]
        common[:, 8:11] *= own[:, 1:2]
        noise = random.standard_normal((draws_n, 9)) * own[:, 2:]
        parts.append(prior.mean + common @ prior.features.T + noise)
    laws = laws_of(parts[0], parts[1], np.zeros_like(parts[0]), np.zeros(9))
    log_weight = np.zeros(draws_n)
    for window in windows:
        [(pathway, histogram)] = window.histograms.items()
        p = show(laws, {3 * pathway[0] + pathway[1]: histogram}).probability
        k, n = window.recording.connected_n, window.recording.tested_n
        log_weight += k * np.log(p) + (n - k) * np.log1p(-p)
    weight = np.exp(log_weight - log_weight.max())
    return laws, weight / weight.sum()


def test_posteriors_equal_weighted_draws_of_the_prior():
    """The whole inference against importance sampling that shares none of it."""
    rows = [
        _one(1, NEAR, (0, 0), tested_n=30, connected_n=4),
        _one(2, FAR, (0, 2), tested_n=25, connected_n=3),
        _one(3, NEAR, (2, 0), tested_n=20, connected_n=12),
    ]
    laws, weight = _weighted_prior(rows)
    assert 1 / (weight**2).sum() > 5000
    points, draws_n = np.array([0.05, 0.25, 0.5, 0.75, 0.95]), 1600
    fit = _fit(rows, seed=2, draws_n=draws_n)
    for code in (0, 1, 2, 6, 4):
        p = show(laws, {code: NEAR}).probability
        order = np.argsort(p)
        got = np.quantile(show(fit.draws, {code: NEAR}).probability, points)
        reached = np.interp(got, p[order], np.cumsum(weight[order]))
        # Four standard errors of 1,600 draws (false alarm 1 in 16,000 for each of 25
        # checks). What the draws' approximation may miss is promised to stay below
        # 0.05 of probability; it is worst where a share comes near its ceiling.
        allowed = 4 * np.sqrt(points * (1 - points) / draws_n) + 0.05
        assert (np.abs(reached - points) < allowed).all(), (code, reached)


def test_rows_can_stand_in_any_order_and_types_have_any_names():
    _, rows = _exact_rows()
    rows += [
        _one(4, FAR, (1, 1), tested_n=40, connected_n=3),
        _window(5, {(2, 0): NEAR, (2, 1): FAR}, tested_n=40, connected_n=11),
        _one(6, FAR, (0, 1), probability=0.05, synapses_mean=1.2),
    ]
    first = _fit(rows)
    again = _fit([rows[i] for i in (5, 2, 0, 4, 1, 3)])
    for name in ("t0", "t1", "t2"):
        assert (getattr(first.laws, name) == getattr(again.laws, name)).all()
        assert (getattr(first.draws, name) == getattr(again.draws, name)).all()
    renamed = [
        Window(w.recording.model_copy(update={"pre_type": "x"}), w.histograms)
        for w in rows
    ]
    assert (_fit(renamed).laws.t0 == first.laws.t0).all()


def test_splitting_a_row_in_two_does_not_change_the_fit():
    whole = [_one(1, NEAR, tested_n=60, connected_n=9)]
    parts = [
        _one(1, NEAR, tested_n=20, connected_n=5),
        _one(2, NEAR, tested_n=40, connected_n=4),
    ]
    other = [_one(3, FAR, (1, 2), tested_n=30, connected_n=6)]
    one, two = _fit(whole + other), _fit(parts + other)
    # Same likelihood up to a constant; the search for the mode ends within 0.03
    # posterior standard deviations of it, which here are of the order of 0.5.
    assert two.laws.t0 == pytest.approx(one.laws.t0, abs=0.02)
    assert two.laws.t1 == pytest.approx(one.laws.t1, abs=0.02)
    assert two.effective_points == pytest.approx(one.effective_points, rel=0.05)


def test_a_bare_probability_is_met_exactly_by_every_draw():
    rows = [
        _one(1, NEAR, probability=0.07),
        _window(2, {(0, 1): NEAR, (1, 1): FAR}, probability=0.12),
        _one(3, NEAR, (2, 2), probability=0.0),
    ]
    fit = _fit(rows)
    for laws in (fit.laws, fit.draws):
        assert show(laws, {0: NEAR}).probability == pytest.approx(0.07, abs=1e-9)
        pooled = show(laws, {1: NEAR, 4: FAR}).probability
        assert pooled == pytest.approx(0.12, abs=1e-9)
        assert (show(laws, {8: NEAR}).probability == 0).all()
    assert fit.recorded[[0, 1, 4]].all()


@pytest.mark.parametrize("k", [0, 30])
def test_none_or_all_connected_are_information_but_no_certainty(k):
    everyone_touches = np.array([0, 30, 25, 15, 8, 2])
    fit = _fit([_one(1, everyone_touches, tested_n=30, connected_n=k)])
    p = show(fit.draws, {0: everyone_touches}).probability
    far = p if k == 0 else 1 - p
    # Under a flat prior the posterior is Beta(1, 31): 95 % of it is below 0.092. Ours
    # is no flat prior, yet no wider than three times that, and never 0 or 1.
    assert np.quantile(far, 0.95) < 0.28
    assert np.quantile(far, 0.95) > 0.005
    assert far.min() > 0
    free = show(_fit([]).draws, {0: everyone_touches}).probability
    assert np.median(free if k == 0 else 1 - free) > 3 * np.median(far)


@pytest.mark.parametrize("sd", [0.6, 0.9, 1.4])
def test_a_spread_of_synapses_is_met(sd):
    n = 100_000
    row = _one(
        1, NEAR, tested_n=n, connected_n=n // 5, synapses_mean=2.1, synapses_sd=sd,
        synapses_pairs_n=n,
    )  # fmt: skip
    got = show(_fit([row]).laws, {0: NEAR})
    assert got.probability[0] == pytest.approx(0.2, abs=0.005)
    assert got.mean[0] == pytest.approx(2.1, abs=0.02)
    assert got.sd[0] == pytest.approx(sd, abs=0.02)


def test_a_row_with_synapses_alone_tells_of_synapses():
    row = _one(1, NEAR, synapses_mean=2.6, synapses_sd=0.8, synapses_pairs_n=200)
    fit, free = _fit([row]), _fit([])
    got, before = (show(f.draws, {0: NEAR}).mean for f in (fit, free))
    # The standard error of 200 connections is 0.057.
    assert np.median(got) == pytest.approx(2.6, abs=0.2)
    assert got.std() < 0.5 * before.std()
    assert not fit.recorded.any()


def test_a_row_out_of_reach_is_reported_with_the_range():
    [row] = _fit([_one(1, FAR, tested_n=10, connected_n=9)]).rows
    assert not row.feasible
    assert "at most 0.2" in row.note
    assert 0.1 < row.fitted.probability[0] <= 0.2
    [row] = _fit([_one(1, [50, 0, 0], tested_n=10, connected_n=2)]).rows
    assert not row.feasible
    assert "no pair under the protocol has an apposition" in row.note


def test_rows_kept_for_the_audit_change_no_law():
    fitted = _one(1, NEAR, tested_n=60, connected_n=9)
    audit = [
        _one(2, NEAR, tested_n=60, connected_n=50, use="audit"),
        _one(3, NEAR, (0, 1), tested_n=60, connected_n=50, use="audit"),
    ]
    alone, both = _fit([fitted]), _fit([fitted, *audit])
    assert (both.laws.t0 == alone.laws.t0).all()
    assert both.recorded.tolist() == alone.recorded.tolist()
    assert [row.note for row in both.rows[1:]] == ["kept out of the fit"] * 2


def test_a_recorded_pathway_informs_its_likes_more_than_others():
    """A rare pathway between excitatory types lowers what is expected of its likes."""
    rare = [_one(1, NEAR, (0, 0), tested_n=500, connected_n=2)]
    free, told = _fit([]), _fit(rare)

    def change(code):
        before, after = (
            np.median(show(f.draws, {code: NEAR}).probability) for f in (free, told)
        )
        return after - before

    assert change(1) < -0.05
    assert change(1) < change(8)


def test_any_posterior_draw_can_be_the_circuits_law():
    rows = [_one(1, NEAR, tested_n=60, connected_n=9)]
    fit = _fit(rows, draw=7)
    assert (fit.laws.t0 == fit.draws.t0[6:7]).all()
    assert (fit.draws.t0 == _fit(rows).draws.t0).all()
    assert (_fit(rows, seed=1).draws.t0 != fit.draws.t0).any()
