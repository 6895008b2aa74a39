"""Intervals for a measured probability."""

from __future__ import annotations

import numpy as np
from scipy.stats import beta, norm


def wilson_interval(k: int, n: int, level: float = 0.95) -> tuple[float, float]:
    """Return Wilson's score interval without continuity correction.

    Wilson 1927 (J Am Stat Assoc 22:209); method 3 of Newcombe 1998.
    """
    z = norm.ppf(0.5 + level / 2)
    middle = (k + z * z / 2) / (n + z * z)
    half = z / (n + z * z) * np.sqrt(k * (n - k) / n + z * z / 4)
    return max(float(middle - half), 0.0), min(float(middle + half), 1.0)


def exact_interval(k: int, n: int, level: float = 0.95) -> tuple[float, float]:
    """Return the exact interval of Clopper & Pearson 1934 (Biometrika 26:404)."""
    tail = (1 - level) / 2
    low = 0.0 if k == 0 else float(beta.ppf(tail, k, n - k + 1))
    high = 1.0 if k == n else float(beta.ppf(1 - tail, k + 1, n - k))
    return low, high
