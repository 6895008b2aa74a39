"""The law of one pair against enumeration, optimisation and finite differences."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.optimize import minimize

from circuitgen.wiring.law import (
    NEVER,
    Law,
    connection_probability,
    count_moments,
    expected_synapses,
    log_ways,
    moments,
    size_distribution,
)
from circuitgen.wiring.match import gradient, match

LAWS = [
    Law(0.0, 0.0),
    Law(-2.0, 0.5),
    Law(1.5, -1.2, 0.3),
    Law(-4.0, 2.0, -0.5),
    Law(3.0, -6.0, 0.9),
    Law(-30.0, 25.0),
    Law(25.0, -30.0),
    Law(-10.0, 40.0, -5.0),
    Law(20.0, -40.0, 5.0),
]


def _enumerate_sizes(a: int, law: Law) -> np.ndarray:
    """P(s synapses) from the weight of every single subset."""
    weight = np.zeros(a + 1)
    for subset in itertools.product((0, 1), repeat=a):
        s = sum(subset)
        weight[s] += math.exp(law.t0 * (s > 0) + law.t1 * s + law.t2 * s * s)
    return weight / weight.sum()


@pytest.mark.parametrize("law", LAWS, ids=str)
@pytest.mark.parametrize("a", [0, 1, 2, 5, 10])
def test_law_equals_enumeration_of_all_subsets(a, law):
    by_hand = _enumerate_sizes(a, law)
    s = np.arange(a + 1)
    # 1,024 terms, each exact to a few units in the last place of exponents below 500.
    np.testing.assert_allclose(size_distribution(a, law), by_hand, rtol=1e-11)
    found = connection_probability(np.array([a]), law)[0]
    np.testing.assert_allclose(found, by_hand[1:].sum(), rtol=1e-11)
    found = expected_synapses(np.array([a]), law)[0]
    np.testing.assert_allclose(found, by_hand @ s, rtol=1e-11)
    if a:
        given = by_hand[1:] / by_hand[1:].sum()
        mean, square = count_moments(np.array([a]), law.t1, law.t2)
        np.testing.assert_allclose(mean[0], given @ s[1:], rtol=1e-11)
        np.testing.assert_allclose(square[0], given @ s[1:] ** 2, rtol=1e-11)


@pytest.mark.parametrize("law", LAWS, ids=str)
def test_moments_of_a_histogram_are_those_of_its_pairs(law):
    histogram = np.array([4, 0, 3, 2, 0, 0, 1])
    share = np.zeros(7)
    for a, pairs in enumerate(histogram):
        share[: a + 1] += pairs / histogram.sum() * _enumerate_sizes(a, law)
    s, p = np.arange(7), share[1:].sum()
    mean = share @ s / p
    # The variance of a nearly fixed number cancels to the last place of its square.
    sd = math.sqrt(share[1:] @ (s[1:] - mean) ** 2 / p)
    found = moments(histogram, law)
    np.testing.assert_allclose([found.probability, found.mean], [p, mean], rtol=1e-11)
    np.testing.assert_allclose(found.sd, sd, rtol=1e-9, atol=2e-7)


def test_a_law_that_never_connects_has_no_mean():
    found = moments(np.array([1, 2, 3]), Law(NEVER, 0.4))
    assert found.probability == 0.0
    assert np.isnan(found.mean)
    assert np.isnan(found.sd)
    np.testing.assert_array_equal(size_distribution(3, Law(NEVER, 0.4)), [1, 0, 0, 0])


def _entropy_constraints(count, p, mean, spread):
    s = np.arange(count.size)
    wanted = [
        (np.ones(count.size), 1.0),
        (s > 0, p),
        (s.astype(float), p * mean),
    ]
    if spread is not None:
        wanted.append((s.astype(float) ** 2, p * (spread**2 + mean**2)))
    return wanted


@pytest.mark.parametrize(
    ("a", "p", "mean", "spread"),
    [
        (2, 0.3, 1.4, None),
        (4, 0.1, 1.7, None),
        (6, 0.6, 2.5, None),
        (5, 0.3, 2.2, 0.8),
        (6, 0.4, 3.0, 1.6),
    ],
)
def test_no_distribution_over_subsets_with_the_same_means_has_more_entropy(
    a, p, mean, spread
):
    """SLSQP over the probabilities of all 2**a subsets, without any exponential form."""
    subsets = np.array(list(itertools.product((0, 1), repeat=a)))
    size = subsets.sum(axis=1)
    rows = _entropy_constraints(np.arange(a + 1), p, mean, spread)
    matrix = np.array([np.asarray(row, float)[size] for row, _ in rows])
    value = np.array([value for _, value in rows])

    # Any start that meets nothing in particular; the problem is convex.
    start = np.full(size.size, 1 / size.size)
    best = minimize(
        lambda x: float(x @ np.log(x)),
        start,
        jac=lambda x: np.log(x) + 1,
        bounds=[(1e-12, 1.0)] * size.size,
        constraints={
            "type": "eq",
            "fun": lambda x: matrix @ x - value,
            "jac": lambda x: matrix,
        },
        method="SLSQP",
        options={"maxiter": 1000, "ftol": 1e-14},
    )
    np.testing.assert_allclose(matrix @ best.x, value, atol=1e-9)
    histogram = np.zeros(a + 1)
    histogram[a] = 1
    found = match(histogram, p, mean, spread)
    assert found.feasible
    of_size = size_distribution(a, found.law)
    each = of_size[size] / np.array([math.comb(a, int(s)) for s in size])
    # The optimiser stops where the objective moves by less than 1e-14, so the argument
    # is good to about the square root of that.
    np.testing.assert_allclose(each, best.x, atol=1e-5)


@pytest.mark.parametrize(
    ("a", "t1", "expected"),
    [
        # S -> log a + t1 when single synapses carry all the weight.
        (1, -700.0, -700.0),
        (5000, -700.0, math.log(5000) - 700.0),
        # S -> a t1 when the whole set does.
        (1, 700.0, 700.0),
        (5000, 700.0, 3_500_000.0),
        # S = log(2**a - 1) when every subset weighs the same.
        (5000, 0.0, 5000 * math.log(2)),
        (3, 0.0, math.log(7)),
    ],
)
@pytest.mark.parametrize("t2", [0.0, 1e-300])
def test_log_ways_reaches_its_limits_without_overflow(a, t1, expected, t2):
    found = log_ways(np.array([a]), t1, t2)[0]
    # log C(5000, s) comes from differences of numbers near 4e4: 1e-16 * 4e4 = 4e-12.
    np.testing.assert_allclose(found, expected, rtol=1e-13, atol=1e-11)


@pytest.mark.parametrize("t2", [0.0, -0.01, 0.02])
@pytest.mark.parametrize("t1", [-700.0, -3.0, 0.0, 3.0, 700.0])
def test_moments_stay_finite_and_within_bounds_at_the_extremes(t1, t2):
    a = np.array([0, 1, 2, 500])
    mean, square = count_moments(a, t1, t2)
    assert mean[0] == 0
    assert square[0] == 0
    slack = 1e-9
    assert (mean[1:] >= 1 - slack).all()
    assert (mean[1:] <= a[1:] + slack).all()
    assert (square[1:] >= mean[1:] ** 2 * (1 - slack)).all()
    assert log_ways(a, t1, t2)[0] == -np.inf
    assert np.isfinite(log_ways(a, t1, t2)[1:]).all()


@pytest.mark.parametrize("law", LAWS[:5], ids=str)
def test_gradient_equals_finite_differences(law):
    histogram = np.array([5.0, 4.0, 3.0, 0.0, 2.0, 0.0, 0.0, 1.0])
    step = 1e-5
    dp, dmean = gradient(histogram, law)
    for k, (d0, d1) in enumerate([(step, 0.0), (0.0, step)]):
        up = moments(histogram, Law(law.t0 + d0, law.t1 + d1, law.t2))
        down = moments(histogram, Law(law.t0 - d0, law.t1 - d1, law.t2))
        # Central differences: step**2 of truncation, 1e-16 / step of rounding.
        slope = (up.probability - down.probability) / (2 * step)
        assert dp[k] == pytest.approx(slope, rel=1e-7, abs=1e-9)
        assert dmean[k] == pytest.approx((up.mean - down.mean) / (2 * step), abs=1e-8)
