"""The law of one pair against enumeration, and its entropy against an optimizer."""

from __future__ import annotations

import numpy as np
import pytest
from oracles_wiring import averages_over_pairs, count_probabilities
from scipy import optimize, special, stats

from circuitgen.wiring import moments
from circuitgen.wiring.law import (
    connection_probability,
    expected_synapses,
    log_ways,
    mean_synapses,
    sd_synapses,
    synapse_distribution,
    ways,
)

LAWS = [
    (0.0, 0.0, 0.0),
    (-2.0, 0.7, 0.0),
    (1.5, -3.0, 0.0),
    (-6.0, 2.5, 0.0),
    (-2.0, 1.4, -0.3),
    (0.5, -2.0, 0.25),
]


@pytest.mark.parametrize("law", LAWS)
def test_law_equals_enumeration_of_all_subsets(law):
    t0, t1, t2 = law
    a = np.arange(11)
    full = synapse_distribution(a, t0, t1, t2)
    for each in a:
        expected = count_probabilities(each, t0, t1, t2)
        given = expected[1:]
        assert full[each, : each + 1] == pytest.approx(expected, rel=1e-12)
        assert not full[each, each + 1 :].any()
        p = connection_probability(each, t0, t1, t2)
        assert p == pytest.approx(1 - expected[0], rel=1e-12, abs=1e-15)
        s = np.arange(1, each + 1)
        total = expected_synapses(each, t0, t1, t2)
        assert total == pytest.approx(given @ s, rel=1e-12)
        if each:
            mean = given @ s / given.sum()
            sd = np.sqrt(given @ (s - mean) ** 2 / given.sum())
            assert mean_synapses(each, t1, t2) == pytest.approx(mean, rel=1e-12)
            assert sd_synapses(each, t1, t2) == pytest.approx(sd, abs=1e-7)


def test_law_of_one_pair_has_the_largest_entropy_under_its_constraints():
    """The optimizer knows subsets and constraints only, not the form of the law."""
    a, law = 5, (-1.2, 0.8, -0.15)
    size = np.array([int(subset).bit_count() for subset in range(2**a)])
    mine = synapse_distribution(a, *law)[size] / special.comb(a, size)
    statistics = np.array([np.ones(2**a), size > 0, size, size**2], float)
    found = optimize.minimize(
        lambda q: -special.entr(q).sum(),
        np.full(2**a, 2.0**-a),
        jac=lambda q: np.log(q) + 1,
        method="SLSQP",
        bounds=[(1e-9, 1.0)] * 2**a,
        constraints={
            "type": "eq",
            "fun": lambda q: statistics @ (q - mine),
            "jac": lambda q: statistics,
        },
        options={"ftol": 1e-14, "maxiter": 500},
    )
    assert found.success
    # The entropy is flat at its top: an error of 1e-12 there is one of 1e-6 in q.
    assert -found.fun == pytest.approx(special.entr(mine).sum(), abs=1e-10)
    assert found.x == pytest.approx(mine, abs=3e-6)


@pytest.mark.parametrize("a", [1, 2, 30, 1000, 5000])
@pytest.mark.parametrize("t1", [-9.0, -2.0, 0.0, 3.0])
def test_plain_law_is_the_zero_truncated_binomial_of_scipy(a, t1):
    binomial = stats.binom(a, special.expit(t1))
    connected = binomial.sf(0)
    mean = binomial.mean() / connected
    variance = (binomial.var() + binomial.mean() ** 2) / connected - mean**2
    found = ways(a, t1)
    log_sum = np.log(connected) - a * np.log1p(-special.expit(t1))
    # scipy's variance is a difference of numbers of the size of mean^2.
    assert found.log_sum == pytest.approx(log_sum, rel=1e-10, abs=1e-10)
    assert found.mean == pytest.approx(mean, rel=1e-10)
    assert found.variance == pytest.approx(variance, rel=1e-9, abs=1e-11 * mean**2)


def test_sum_term_by_term_continues_the_closed_form():
    a = np.arange(1, 400)
    closed, summed = ways(a, -1.3), ways(a, -1.3, 1e-300)
    for one, other in zip(closed, summed, strict=True):
        assert one == pytest.approx(other, rel=1e-10, abs=1e-12)


def test_extreme_parameters_stay_finite_and_exact():
    a = np.array([1, 2, 7, 5000])
    # For t1 -> -inf one synapse is left: S -> log a + t1 (wiring law, section 1).
    assert log_ways(a, -800.0) == pytest.approx(np.log(a) - 800.0, rel=1e-15)
    assert mean_synapses(a, -800.0) == pytest.approx(1.0, abs=0)
    # For t1 -> inf all are taken: S -> a t1.
    assert log_ways(a, 700.0) == pytest.approx(700.0 * a, rel=1e-15)
    assert mean_synapses(a, 700.0) == pytest.approx(a, abs=0)
    assert connection_probability(a, -np.inf, 3.0).tolist() == [0.0] * 4
    assert connection_probability(a, np.inf, -800.0).tolist() == [1.0] * 4


@pytest.mark.parametrize("t0", [-np.inf, -3.0, 500.0, np.inf])
@pytest.mark.parametrize("t2", [0.0, 0.4])
def test_pairs_without_apposition_are_never_connected(t0, t2):
    assert connection_probability(0, t0, 2.0, t2) == 0
    assert expected_synapses(0, t0, 2.0, t2) == 0
    assert synapse_distribution([0, 2], t0, 2.0, t2)[0].tolist() == [1, 0, 0]


@pytest.mark.parametrize("law", LAWS)
def test_moments_over_a_histogram_equal_plain_sums(law):
    counts = [40, 20, 0, 12, 5, 0, 3, 1]
    p, mean, variance = averages_over_pairs(counts, *law)
    now = moments(counts, *law)
    assert now.probability == pytest.approx(p, rel=1e-12)
    assert now.synapses_mean == pytest.approx(mean, rel=1e-12)
    assert now.synapses_sd == pytest.approx(np.sqrt(variance), rel=1e-10)


@pytest.mark.parametrize("law", LAWS)
def test_derivatives_over_a_histogram_equal_differences(law):
    counts, step = [40, 20, 0, 12, 5, 0, 3, 1], 1e-5
    t0, t1, t2 = law
    now = moments(counts, *law)
    for axis, shift in enumerate([(step, 0.0), (0.0, step)]):
        above = moments(counts, t0 + shift[0], t1 + shift[1], t2)
        below = moments(counts, t0 - shift[0], t1 - shift[1], t2)
        # Central differences err by step^2 and by rounding / step: below 1e-9 each.
        slope = (above.probability - below.probability) / (2 * step)
        assert now.probability_slope[axis] == pytest.approx(slope, abs=2e-9)
        slope = (above.synapses_mean - below.synapses_mean) / (2 * step)
        assert now.mean_slope[axis] == pytest.approx(slope, abs=2e-9)


def test_a_histogram_without_pairs_is_refused():
    for counts in ([0, 0], [], [3, -1], [[1, 2]]):
        with pytest.raises(ValueError, match="at least one pair"):
            moments(counts, 0.0, 0.0)
