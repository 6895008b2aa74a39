"""Fewer points for the same course: Ramer 1972, Douglas & Peucker 1973, with radius.

Only corners are kept, so that a section sampled at 0.3 um, or with every piece cut in
two, gives the very segments that its coarse version gives: how far a course strays from
a straight piece is largest at a corner, never between two.
"""

from __future__ import annotations

import numpy as np

COURSE_TOLERANCE_UM = 0.1
RADIUS_TOLERANCE_UM = 0.05
# Strays this close to each other, in tolerances, are the same: the first one counts.
_TIE = 1e-6


def ranges(low: np.ndarray, high: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return all integers of the ranges [low, high) in a row, and whose they are."""
    count = high - low
    which = np.repeat(np.arange(low.size), count)
    begin = np.cumsum(count) - count
    return np.arange(which.size) - begin[which] + low[which], which


def _stray(points, radii, low, high, inner, which) -> np.ndarray:
    """How far inner points stray from their straight piece, in tolerances."""
    start, chord = points[low], points[high] - points[low]
    square = (chord**2).sum(axis=1)
    away = points[inner] - start[which]
    along = (away * chord[which]).sum(axis=1) / np.where(square > 0, square, 1)[which]
    forward = np.clip(along, 0.0, 1.0)
    # Never back along the piece: a hairpin strays, however narrow it is.
    furthest = np.maximum.accumulate(forward + 2.0 * which) - 2.0 * which
    forward = np.where(furthest > forward + 1e-10, furthest, forward)
    course = np.linalg.norm(away - forward[:, None] * chord[which], axis=1)
    widen = (radii[high] - radii[low])[which]
    radius = np.abs(radii[inner] - radii[low][which] - along * widen)
    return np.maximum(course / COURSE_TOLERANCE_UM, radius / RADIUS_TOLERANCE_UM)


def corners(points: np.ndarray, radii: np.ndarray, first: np.ndarray) -> np.ndarray:
    """Tell which points of sections are corners, ends included.

    Parameters
    ----------
    points : (n, 3)
        Points of all sections, one section after another, in micrometres.
    radii : (n,)
        Radii there, in micrometres.
    first : int (k,)
        Index of the first point of every section.

    Returns
    -------
    ndarray of bool (n,)
        Every other point lies within `COURSE_TOLERANCE_UM` of the straight pieces
        between corners, and its radius within `RADIUS_TOLERANCE_UM`.
    """
    last = np.append(first[1:], len(points)) - 1
    keep = np.zeros(len(points), bool)
    keep[first] = keep[last] = True
    low, high = first, last
    while low.size:
        wide = high - low > 1
        low, high = low[wide], high[wide]
        if not low.size:
            break
        inner, which = ranges(low + 1, high)
        stray = _stray(points, radii, low, high, inner, which)
        begin = np.cumsum(high - low - 1) - (high - low - 1)
        worst = np.maximum.reduceat(stray, begin)
        tied = np.flatnonzero(stray >= worst[which] - _TIE)
        _, place = np.unique(which[tied], return_index=True)
        middle = inner[tied[place]]
        split = worst > 1.0 + _TIE
        keep[middle[split]] = True
        low = np.column_stack([low[split], middle[split]]).ravel()
        high = np.column_stack([middle[split], high[split]]).ravel()
    return keep
