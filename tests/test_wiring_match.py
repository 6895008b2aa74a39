"""Matching measurements exactly; feasible ranges against linear programming."""

from __future__ import annotations

import re

import numpy as np
import pytest
from oracles_wiring import averages_over_pairs, linear_extreme

from circuitgen.wiring import match, moments
from circuitgen.wiring.law import Histogram, synapse_distribution
from circuitgen.wiring.match import mean_high, spread_range

SMALL = [50, 30, 10, 5, 3, 2]


def random_counts(rng, most):
    counts = rng.integers(0, 1000, most + 1) * (rng.random(most + 1) < 0.7)
    counts[0] = rng.integers(0, 5000)
    counts[[1, most]] += 1
    return counts


def inner_targets(rng, counts):
    """Draw targets well inside what the histogram allows."""
    histogram = Histogram.of(counts)
    p = rng.uniform(0.01, 0.99) * histogram.touching
    mean = 1 + rng.uniform(0.02, 0.98) * (mean_high(histogram, p) - 1)
    low, high = spread_range(histogram, p, mean)
    spread = np.sqrt(low**2 + rng.uniform(0.03, 0.97) * (high**2 - low**2))
    return p, mean, spread


def test_probability_and_mean_are_met_exactly_over_random_histograms():
    rng = np.random.default_rng(5)
    for _ in range(300):
        counts = random_counts(rng, rng.integers(2, 150))
        p, mean, _ = inner_targets(rng, counts)
        law = match(counts, p, mean)
        now = moments(counts, law.t0, law.t1, law.t2)
        assert law.feasible
        assert law.note == ""
        assert now.probability == pytest.approx(p, rel=1e-12)
        assert now.synapses_mean == pytest.approx(mean, rel=1e-12)


def test_spread_is_met_exactly_over_random_histograms():
    rng = np.random.default_rng(6)
    for _ in range(60):
        counts = random_counts(rng, rng.integers(3, 60))
        p, mean, spread = inner_targets(rng, counts)
        law = match(counts, p, mean, spread)
        now = moments(counts, law.t0, law.t1, law.t2)
        assert law.feasible
        assert now.probability == pytest.approx(p, rel=1e-11)
        assert now.synapses_mean == pytest.approx(mean, rel=1e-11)
        assert now.synapses_sd == pytest.approx(spread, rel=1e-10)


def test_the_match_holds_by_enumeration_of_subsets():
    law = match(SMALL, 0.22, 1.9, 0.95)
    p, mean, variance = averages_over_pairs(SMALL, law.t0, law.t1, law.t2)
    assert (p, mean) == pytest.approx((0.22, 1.9), rel=1e-12)
    assert variance == pytest.approx(0.95**2, rel=1e-11)


@pytest.mark.parametrize("seed", range(25))
def test_feasible_ranges_are_those_of_linear_programming(seed):
    rng = np.random.default_rng(seed)
    counts = random_counts(rng, rng.integers(2, 9))
    histogram = Histogram.of(counts)
    p, mean, _ = inner_targets(rng, counts)
    # Tolerances: those of the linear programming library, 1e-7 of each constraint.
    highest = linear_extreme(counts, lambda s: 1.0 * (s > 0), sign=-1)
    assert histogram.touching == pytest.approx(highest, abs=1e-7)
    total = linear_extreme(counts, lambda s: s, probability=p, sign=-1)
    assert mean_high(histogram, p) * p == pytest.approx(total, abs=1e-6)
    for found, sign in zip(spread_range(histogram, p, mean), (1, -1), strict=True):
        given = {"probability": p, "mean": mean, "sign": sign}
        square = linear_extreme(counts, lambda s: s**2, **given)
        assert p * (found**2 + mean**2) == pytest.approx(square, abs=1e-5)


def test_the_lowest_mean_and_spread_are_met_at_the_limit():
    law = match(SMALL, 0.3, 1.0, 0.0)
    assert law.feasible
    assert (law.probability, law.synapses_mean) == pytest.approx((0.3, 1.0), abs=1e-12)
    assert law.synapses_sd == pytest.approx(0.0, abs=1e-9)


def test_no_connection_and_all_touching_pairs_connected_are_limits():
    none = match(SMALL, 0.0)
    assert (none.t0, none.probability, none.feasible) == (-np.inf, 0.0, True)
    every = match(SMALL, 0.5, 1.4)
    assert (every.t0, every.feasible) == (np.inf, True)
    assert every.probability == pytest.approx(0.5, abs=1e-15)
    assert every.synapses_mean == pytest.approx(1.4, rel=1e-12)


def test_without_a_mean_the_given_exponent_is_kept():
    law = match(SMALL, 0.2, t1=-0.7)
    assert (law.t1, law.t2) == (-0.7, 0.0)
    assert law.probability == pytest.approx(0.2, rel=1e-12)
    # No pair has two appositions: a mean of 1 says nothing about t1.
    assert match([5, 5], 0.2, 1.0, t1=-0.7).t1 == -0.7


@pytest.mark.parametrize(
    ("targets", "words", "reached"),
    [
        # SMALL: 50 of 100 pairs touch; the 30 with most have 67 appositions.
        ((0.7,), "probability 0.7 cannot be met: .* between 0 and 0.5;", (0.5,)),
        (
            (0.3, 5.0),
            r"synapses_mean 5 cannot be met: .* between 1 and 2.233;",
            (0.3, 67 / 30),
        ),
        ((0.3, 2.0, 0.1), "synapses_sd 0.1 cannot be met", (0.3, 2.0, np.sqrt(2 / 3))),
        ((0.3, 2.0, 3.0), "synapses_sd 3 cannot be met", (0.3, 2.0, np.sqrt(26 / 15))),
    ],
)
def test_infeasible_targets_are_reported_and_the_nearest_is_met(targets, words, reached):
    """Spreads by hand, for 30 connections with 60 synapses.

    Lowest: 30 are their pair's first synapse, 20 the second, 10 the third, so the
    second moment is (30 + 3 * 20 + 5 * 10) / 30 = 14 / 3. Highest: the 30 beyond the
    first are 8 + 9 + 10 on all pairs of 5, 4 and 3 appositions and 3 on pairs of 2;
    (2 * 25 + 3 * 16 + 5 * 9 + 3 * 4 + 17) / 30 = 86 / 15.
    """
    law = match(SMALL, *targets)
    assert not law.feasible
    assert re.search(words, law.note)
    assert "the nearest law is used" in law.note
    values = (law.probability, law.synapses_mean, law.synapses_sd)[: len(reached)]
    assert values == pytest.approx(reached, rel=1e-9)


def test_impossible_numbers_are_refused():
    for targets in ((-0.1,), (1.1,), (np.nan,), (0.2, 0.9), (0.2, None, 1.0)):
        with pytest.raises(ValueError, match="must"):
            match(SMALL, *targets)


def test_pairs_that_never_touch_are_never_connected():
    law = match([100], 0.2)
    assert not law.feasible
    assert law.probability == 0
    assert law.t0 == -np.inf


def humps(distribution):
    """Count the local peaks of a distribution."""
    padded = np.concatenate([[0.0], distribution, [0.0]])
    inner = padded[1:-1]
    return int(((inner > padded[:-2]) & (inner > padded[2:])).sum())


def test_a_spread_beyond_the_plain_law_gives_two_humps_and_says_so():
    counts = np.array([0] * 12 + [100])
    plain = match(counts, 0.5, 5.0)
    wide = match(counts, 0.5, 5.0, 4.0)
    assert wide.t2 > 0
    assert "two humps" in wide.note
    assert plain.synapses_sd < 4.0
    given = synapse_distribution(12, np.inf, [plain.t1, wide.t1], [0.0, wide.t2])
    assert [humps(each) for each in given] == [1, 2]


def test_published_spread_of_a_spiny_pathway_is_met():
    """Feldmeyer et al. 1999, J Physiol 521:169, rat layer 4 spiny to spiny cells.

    3.4 +- 1.0 contacts per connection, range 2-5, n = 11. The histogram is invented:
    Poisson numbers of appositions with a gamma-distributed mean.
    """
    rng = np.random.default_rng(11)
    counts = np.bincount(rng.poisson(rng.gamma(1.5, 2.0, 20_000)))
    # The probability, invented as well, is of the size of cortical pathways.
    plain, law = match(counts, 0.2, 3.4), match(counts, 0.2, 3.4, 1.0)
    assert law.feasible
    assert law.note == ""
    assert (law.synapses_mean, law.synapses_sd) == pytest.approx((3.4, 1.0), abs=1e-11)
    # Narrower than the plain law: t2 pulls toward the middle.
    assert plain.synapses_sd > 1.0
    assert law.t2 < 0
    now = connections_by_synapses(counts, law)
    within = now[2:6].sum()
    # All 11 within 2..5 is no surprise under the law: probability above 5 %.
    assert within**11 > 0.05


def connections_by_synapses(counts, law):
    full = synapse_distribution(np.arange(counts.size), law.t0, law.t1, law.t2)
    total = counts @ full
    return total * (np.arange(total.size) > 0) / total[1:].sum()
