"""Exact matching, and what can be matched at all against linear programming."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import linprog

from circuitgen.wiring.law import moments
from circuitgen.wiring.match import (
    largest_mean,
    largest_probability,
    match,
    spread_range,
)


def _random_histogram(rng, *, most=25):
    a = rng.integers(1, most, rng.integers(2, 12))
    histogram = np.bincount(a, weights=rng.uniform(0.2, 50, a.size), minlength=most)
    histogram[0] = rng.uniform(0, 2) * histogram.sum()
    return histogram


def _programme(histogram, objective, equalities):
    """Maximise over the distribution of (a, s); functions of s given as callables."""
    share = np.asarray(histogram, float) / np.sum(histogram)
    places = [(a, s) for a in range(share.size) for s in range(a + 1)]
    a, s = np.array(places).T
    rows = [(a == k).astype(float) for k in range(share.size)]
    values = list(share)
    for function, value in equalities:
        rows.append(function(s))
        values.append(value)
    best = linprog(-objective(s), A_eq=np.array(rows), b_eq=values, method="highs")
    assert best.status == 0, best.message
    return -best.fun


def _connected(s):
    return (s > 0).astype(float)


def _number(s):
    return s.astype(float)


def _square(s):
    return s.astype(float) ** 2


@pytest.mark.parametrize("seed", range(20))
def test_feasible_ranges_are_those_of_a_linear_programme(seed):
    """Over every distribution of (a, s), not only over the exponential family."""
    rng = np.random.default_rng(seed)
    histogram = _random_histogram(rng, most=10)
    most = largest_probability(histogram)
    assert most == pytest.approx(_programme(histogram, _connected, []), abs=1e-9)
    p = rng.uniform(0.05, 1.0) * most
    fixed = [(_connected, p)]
    top = largest_mean(histogram, p)
    assert top == pytest.approx(_programme(histogram, _number, fixed) / p, abs=1e-8)
    mean = 1 + rng.uniform(0.05, 0.95) * (top - 1)
    fixed.append((_number, p * mean))
    low, high = spread_range(histogram, p, mean)
    most_square = _programme(histogram, _square, fixed) / p
    least_square = -_programme(histogram, lambda s: -_square(s), fixed) / p
    # HiGHS is feasible to 1e-9 per row; a square of up to 100 turns that into 1e-6.
    assert high**2 == pytest.approx(most_square - mean**2, abs=1e-6)
    assert low**2 == pytest.approx(least_square - mean**2, abs=1e-6)


def test_probability_and_mean_are_met_over_random_histograms():
    rng = np.random.default_rng(20)
    for _ in range(200):
        histogram = _random_histogram(rng)
        p = rng.uniform(0.001, 0.99) * largest_probability(histogram)
        mean = 1 + rng.uniform(0.02, 0.98) * (largest_mean(histogram, p) - 1)
        found = match(histogram, p, mean)
        assert found.feasible, found.note
        got = moments(histogram, found.law)
        assert got.probability == pytest.approx(p, abs=1e-10)
        assert got.mean == pytest.approx(mean, abs=1e-10)


def test_spread_is_met_too_over_random_histograms():
    rng = np.random.default_rng(21)
    for _ in range(200):
        histogram = _random_histogram(rng, most=12)
        p = rng.uniform(0.01, 0.95) * largest_probability(histogram)
        mean = 1 + rng.uniform(0.1, 0.9) * (largest_mean(histogram, p) - 1)
        low, high = spread_range(histogram, p, mean)
        sd = low + rng.uniform(0.1, 0.9) * (high - low)
        found = match(histogram, p, mean, sd)
        assert found.feasible, found.note
        got = moments(histogram, found.law)
        assert got.probability == pytest.approx(p, abs=1e-10)
        assert got.mean == pytest.approx(mean, abs=1e-8)
        assert got.sd == pytest.approx(sd, abs=1e-8)


HISTOGRAM = np.array([40.0, 30.0, 15.0, 10.0, 5.0])


def test_a_probability_alone_leaves_the_given_exponent():
    found = match(HISTOGRAM, 0.2, t1_given=-0.7)
    assert found.feasible
    assert found.law.t1 == -0.7
    assert found.law.t2 == 0.0
    assert moments(HISTOGRAM, found.law).probability == pytest.approx(0.2, abs=1e-12)


def test_probability_zero_never_connects():
    found = match(HISTOGRAM, 0.0, 2.0)
    assert found.feasible
    assert found.law.t0 == -np.inf
    assert moments(HISTOGRAM, found.law).probability == 0.0


def test_the_largest_probability_connects_every_touching_pair():
    found = match(HISTOGRAM, 0.6, 1.5)
    assert found.feasible, found.note
    got = moments(HISTOGRAM, found.law)
    assert got.probability == pytest.approx(0.6, abs=1e-10)
    assert got.mean == pytest.approx(1.5, abs=1e-10)


@pytest.mark.parametrize("sd", [None, 0.0])
def test_mean_one_makes_every_connection_a_single_synapse(sd):
    for p in (0.01, 0.123, 0.3, 0.6):
        found = match(HISTOGRAM, p, 1.0, sd)
        assert found.feasible, found.note
        got = moments(HISTOGRAM, found.law)
        assert got.probability == pytest.approx(p, abs=1e-10)
        assert got.mean == pytest.approx(1.0, abs=1e-10)
        # A variance of 0 is known to the rounding of squares near 1, its root to 1e-7.
        assert got.sd == pytest.approx(0.0, abs=1e-7)


def test_the_largest_mean_uses_every_site_of_the_best_touching_pairs():
    # The best-touching 0.15 are the pairs with 4 and with 3 appositions.
    found = match(HISTOGRAM, 0.15, 10 / 3)
    assert found.feasible, found.note
    got = moments(HISTOGRAM, found.law)
    assert got.probability == pytest.approx(0.15, abs=1e-10)
    assert got.mean == pytest.approx(10 / 3, abs=1e-9)


@pytest.mark.parametrize(
    ("targets", "words", "nearest"),
    [
        ((0.7,), ["probability 0.7", "at most 0.6"], (0.6, None)),
        ((0.7, 1.5), ["probability 0.7", "at most 0.6"], (0.6, 1.5)),
        # The best 0.15: mean (5 * 4 + 10 * 3) / 15 = 3.333.
        ((0.15, 4.0), ["4 synapses", "1 to 3.333"], (0.15, 10 / 3)),
        # All 0.6: (30 + 2 * 15 + 3 * 10 + 4 * 5) / 60 = 1.8333.
        ((0.9, 3.0), ["at most 0.6", "1 to 1.833"], (0.6, 11 / 6)),
        # Mean 1.5 with whole numbers has a spread of at least 0.5.
        ((0.3, 1.5, 0.2), ["0.2 synapses", "0.5 to "], (0.3, 1.5)),
    ],
)
def test_targets_out_of_reach_say_what_is_in_reach(targets, words, nearest):
    found = match(HISTOGRAM, *targets)
    assert not found.feasible
    for word in words:
        assert word in found.note
    got = moments(HISTOGRAM, found.law)
    p, mean = nearest
    assert got.probability == pytest.approx(p, abs=1e-9)
    if mean is not None:
        assert got.mean == pytest.approx(mean, abs=1e-9)


@pytest.mark.parametrize("p", [0.0, 0.1])
def test_pairs_without_apposition_cannot_connect(p):
    found = match(np.array([12.0]), p)
    assert found.feasible == (p == 0.0)
    assert "no pair in the window has an apposition" in found.note
    assert found.law.t0 == -np.inf


def test_a_spread_above_the_plain_law_is_met_and_named():
    plain = moments(HISTOGRAM, match(HISTOGRAM, 0.3, 1.8).law).sd
    for sd, named in ((plain * 0.9, False), (plain * 1.1, True)):
        found = match(HISTOGRAM, 0.3, 1.8, sd)
        assert found.feasible
        assert moments(HISTOGRAM, found.law).sd == pytest.approx(sd, abs=1e-8)
        assert ("pile up at both ends" in found.note) == named


def test_spiny_neurons_of_layer_4_keep_their_spread():
    """Feldmeyer et al. 1999 (J Physiol 521:169): 3.4 +- 1.0 contacts a connection.

    Their own range is 2 to 5 contacts in 11 pairs. The histogram is made up: Poisson
    with 6 appositions a pair. The probability is made up too.
    """
    a = np.arange(25)
    histogram = 10_000 * np.exp(-6.0 + a * np.log(6.0) - np.cumsum(np.log(a.clip(1))))
    found = match(histogram, 0.2, 3.4, 1.0)
    assert found.feasible
    got = moments(histogram, found.law)
    assert (got.probability, got.mean, got.sd) == pytest.approx(
        (0.2, 3.4, 1.0), abs=1e-8
    )
    # A plain binomial law spreads more: the measured spread needs the third exponent.
    assert moments(histogram, match(histogram, 0.2, 3.4).law).sd > 1.2
    assert found.law.t2 < 0
