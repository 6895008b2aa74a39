"""Intervals of proportions against published tables and reference libraries."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from statsmodels.stats.proportion import proportion_confint

from circuitgen.wiring import clopper_pearson_interval, wilson_interval


# Newcombe 1998, Stat Med 17:857, Table I, method 3: printed to four decimals.
@pytest.mark.parametrize(
    ("k", "n", "low", "high"),
    [
        (81, 263, 0.2553, 0.3662),
        (15, 148, 0.0624, 0.1605),
        (0, 20, 0.0, 0.1611),
        (1, 29, 0.0061, 0.1718),
    ],
)
def test_wilson_interval_of_newcombe(k, n, low, high):
    assert wilson_interval(k, n) == pytest.approx((low, high), abs=0.5e-4)


# Printed in the public notebooks of a survey of mouse visual cortex, in per cent.
@pytest.mark.parametrize(
    ("k", "n", "low", "high"), [(12, 32, 21.10, 56.31), (0, 23, 0.0, 14.82)]
)
def test_exact_interval_of_a_published_survey(k, n, low, high):
    found = clopper_pearson_interval(k, n)
    assert 100 * np.array(found) == pytest.approx((low, high), abs=0.5e-2)


@pytest.mark.parametrize("level", [0.5, 0.9, 0.95])
@pytest.mark.parametrize("n", [1, 7, 150])
def test_intervals_equal_those_of_statsmodels_and_scipy(n, level):
    k = np.arange(n + 1)
    for method, scipy_method, ours in (
        ("wilson", "wilson", wilson_interval),
        ("beta", "exact", clopper_pearson_interval),
    ):
        low, high = ours(k, n, level)
        theirs = proportion_confint(k, n, alpha=1 - level, method=method)
        # statsmodels leaves rounding where an end is exactly 0 or 1.
        assert low == pytest.approx(np.asarray(theirs[0]), abs=1e-12)
        assert high == pytest.approx(np.asarray(theirs[1]), abs=1e-12)
        test = stats.binomtest(n // 2, n).proportion_ci(level, method=scipy_method)
        assert low[n // 2] == pytest.approx(test.low, abs=1e-12)
        assert high[n // 2] == pytest.approx(test.high, abs=1e-12)


def test_ends_are_exact_where_none_or_all_are_connected():
    for interval in (wilson_interval, clopper_pearson_interval):
        assert interval(0, 40)[0] == 0
        assert interval(40, 40)[1] == 1
