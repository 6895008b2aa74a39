"""Fewer points for the same course: Ramer 1972, Douglas & Peucker 1973, with radius.

Only corners are kept, so that a section sampled at 0.3 um, or with every piece cut in
two, gives the very segments that its coarse version gives.
"""

from __future__ import annotations

import numpy as np

COURSE_TOLERANCE_UM = 0.1
RADIUS_TOLERANCE_UM = 0.05


def _deviation(points: np.ndarray, radii: np.ndarray) -> np.ndarray:
    """How far inner points stray from the straight piece, in units of the tolerance."""
    chord = points[-1] - points[0]
    square = chord @ chord
    away = points[1:-1] - points[0]
    fraction = away @ chord / square if square > 0 else np.zeros(len(away))
    # Never back along the piece: a hairpin strays, however narrow it is.
    forward = np.maximum.accumulate(np.clip(fraction, 0, 1))
    course = np.linalg.norm(away - forward[:, None] * chord, axis=1)
    radius = np.abs(radii[1:-1] - radii[0] - fraction * (radii[-1] - radii[0]))
    return np.maximum(course / COURSE_TOLERANCE_UM, radius / RADIUS_TOLERANCE_UM)


def corners(points_um: np.ndarray, radii_um: np.ndarray) -> np.ndarray:
    """Return indices of the points to keep, ends included.

    Parameters
    ----------
    points_um : (k, 3)
        Points along one unbranched section.
    radii_um : (k,)
        Radii there.

    Returns
    -------
    ndarray of int
        Increasing; every other point lies within `COURSE_TOLERANCE_UM` of the
        straight pieces, and its radius within `RADIUS_TOLERANCE_UM`.
    """
    keep = np.zeros(len(points_um), bool)
    keep[[0, -1]] = True
    pending = [(0, len(points_um) - 1)]
    while pending:
        low, high = pending.pop()
        if high - low < 2:
            continue
        stray = _deviation(points_um[low : high + 1], radii_um[low : high + 1])
        worst = int(stray.argmax())
        if stray[worst] > 1.0:
            middle = low + 1 + worst
            keep[middle] = True
            pending += [(low, middle), (middle, high)]
    return np.flatnonzero(keep)
