"""Intervals of a proportion from counts."""

from __future__ import annotations

import numpy as np
from scipy import stats


def wilson_interval(k, n, level: float = 0.95) -> tuple[np.ndarray, np.ndarray]:
    """Return Wilson's score interval of a proportion, without continuity correction.

    Wilson 1927, J Am Stat Assoc 22:209; method 3 of Newcombe 1998, Stat Med 17:857.

    Parameters
    ----------
    k, n : array_like of int
        Successes, and trials; 0 <= k <= n, n >= 1.
    level : float
        Coverage aimed at.

    Returns
    -------
    low, high : ndarray of float64
        Exactly 0 where k = 0, exactly 1 where k = n.
    """
    k, n = np.asarray(k, dtype=float), np.asarray(n, dtype=float)
    z = stats.norm.ppf(0.5 + level / 2)
    centre = (k + z**2 / 2) / (n + z**2)
    half = z / (n + z**2) * np.sqrt(k * (n - k) / n + z**2 / 4)
    low = np.where(k == 0, 0.0, centre - half)
    high = np.where(k == n, 1.0, centre + half)
    return low, high


def clopper_pearson_interval(k, n, level: float = 0.95) -> tuple[np.ndarray, np.ndarray]:
    """Return the exact interval of a proportion (Clopper & Pearson 1934).

    Biometrika 26:404, through quantiles of the beta distribution. Parameters and
    results as in `wilson_interval`.
    """
    k, n = np.asarray(k, dtype=float), np.asarray(n, dtype=float)
    tail = (1 - level) / 2
    low = np.where(k == 0, 0.0, stats.beta.ppf(tail, np.maximum(k, 1), n - k + 1))
    high = np.where(k == n, 1.0, stats.beta.isf(tail, k + 1, np.maximum(n - k, 1)))
    return low, high
