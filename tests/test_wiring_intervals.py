"""Intervals against printed values and two independent libraries."""

from __future__ import annotations

import pytest
from scipy.stats import binomtest
from statsmodels.stats.proportion import proportion_confint

from circuitgen.wiring import exact_interval, wilson_interval

COUNTS = [(0, 1), (1, 1), (0, 20), (1, 29), (12, 32), (81, 263), (931, 8050)]


@pytest.mark.parametrize(
    ("k", "n", "low", "high"),
    [
        # Newcombe 1998 (Stat Med 17:857), Table I, method 3.
        (81, 263, 0.2553, 0.3662),
        (15, 148, 0.0624, 0.1605),
        (0, 20, 0.0, 0.1611),
        (1, 29, 0.0061, 0.1718),
    ],
)
def test_wilson_reproduces_the_printed_table(k, n, low, high):
    assert wilson_interval(k, n) == pytest.approx((low, high), abs=0.5e-4)


@pytest.mark.parametrize(
    ("k", "n", "low", "high"),
    [
        # Printed in the public notebooks of a survey of synapses in mouse visual cortex.
        (12, 32, 0.2110, 0.5631),
        (0, 23, 0.0, 0.1482),
    ],
)
def test_exact_interval_reproduces_printed_values(k, n, low, high):
    assert exact_interval(k, n) == pytest.approx((low, high), abs=0.5e-4)


@pytest.mark.parametrize("level", [0.5, 0.9, 0.95])
@pytest.mark.parametrize(("k", "n"), COUNTS)
def test_intervals_agree_with_statsmodels_and_scipy(k, n, level):
    wilson = proportion_confint(k, n, alpha=1 - level, method="wilson")
    assert wilson_interval(k, n, level) == pytest.approx(wilson, abs=1e-12)
    exact = proportion_confint(k, n, alpha=1 - level, method="beta")
    assert exact_interval(k, n, level) == pytest.approx(exact, abs=1e-12)
    found = binomtest(k, n)
    by_scipy = found.proportion_ci(level, method="wilson")
    assert wilson_interval(k, n, level) == pytest.approx(tuple(by_scipy), abs=1e-12)
    # scipy finds the exact bounds by a root search of its own.
    by_scipy = found.proportion_ci(level, method="exact")
    assert exact_interval(k, n, level) == pytest.approx(tuple(by_scipy), abs=1e-9)


@pytest.mark.parametrize("interval", [wilson_interval, exact_interval])
@pytest.mark.parametrize("n", [1, 7, 1000])
def test_no_or_all_connected_reach_the_ends_and_mirror_each_other(interval, n):
    low, high = interval(0, n)
    assert low == 0.0
    assert 0 < high < 1
    mirrored = interval(n, n)
    assert mirrored[1] == pytest.approx(1.0, abs=1e-15)
    assert mirrored[0] == pytest.approx(1 - high, abs=1e-12)
