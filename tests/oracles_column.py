"""Slow, readable twins of the column's kernels."""

from __future__ import annotations

import numpy as np


def solid_angle_winding(point, corners):
    """Winding of a closed surface about a point, from the solid angles of triangles.

    Formula of van Oosterom & Strackee 1983, IEEE Trans Biomed Eng 30:125 (recalled).
    """
    a, b, c = np.moveaxis(corners - point, 1, 0)
    la, lb, lc = (np.linalg.norm(side, axis=1) for side in (a, b, c))
    triple = np.sum(a * np.cross(b, c), axis=1)
    below = la * lb * lc
    for pair, other in (((a, b), lc), ((b, c), la), ((c, a), lb)):
        below += np.sum(pair[0] * pair[1], axis=1) * other
    return round(float(np.sum(2 * np.arctan2(triple, below))) / (4 * np.pi))


def apart(first, second, wrap_um):
    """Distance of two points; along a wrapped axis that of the nearest copies."""
    difference = np.asarray(first) - np.asarray(second)
    for axis, period in enumerate(wrap_um):
        if period > 0:
            difference[axis] -= period * round(difference[axis] / period)
    return float(np.sqrt(difference @ difference))


def take_in_turn(candidates, is_cell, radius, wanted, taken, wrap_um):
    """Take free candidates in order until enough are cells; returns their rows.

    `taken` is a list of (centre, radius) and grows.
    """
    rows, cells_n = [], 0
    for row, candidate in enumerate(candidates):
        if cells_n == wanted:
            break
        if all(apart(candidate, c, wrap_um) >= radius + r for c, r in taken):
            taken.append((candidate, radius))
            rows.append(row)
            cells_n += bool(is_cell[row])
    return rows


def smallest_clearance(position_um, radius_um, wrap_um=(0.0, 0.0)):
    """Smallest distance between the surfaces of any two somata, all pairs tried."""
    least = np.inf
    for row in range(len(position_um) - 1):
        difference = position_um[row + 1 :] - position_um[row]
        for axis, period in enumerate(wrap_um):
            if period > 0:
                difference[:, axis] -= period * np.round(difference[:, axis] / period)
        distance = np.linalg.norm(difference, axis=1)
        clearance = distance - radius_um[row + 1 :] - radius_um[row]
        least = min(least, float(clearance.min()))
    return least
