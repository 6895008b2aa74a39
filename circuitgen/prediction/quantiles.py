"""Medians and intervals of posterior draws, as plain numbers."""

from __future__ import annotations

import numpy as np

POINTS = {"low": 0.05, "low_50": 0.25, "median": 0.5, "high_50": 0.75, "high": 0.95}


def summarise(draws: np.ndarray) -> dict[str, float | None]:
    """Return median, 50 % and 90 % interval; None where no draw shows anything."""
    known = draws[~np.isnan(draws)]
    if not known.size:
        return dict.fromkeys(POINTS)
    found = np.quantile(known, list(POINTS.values()))
    return dict(zip(POINTS, map(float, found), strict=True))
