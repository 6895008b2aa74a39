"""The slow readable walk from a site to its soma, inside a slice or not."""

from __future__ import annotations

import numpy as np


def stays_inside(arbor, azimuth_deg, segment, fraction, across, depth_um, thickness_um):
    """Tell whether the path from a place on an arbor to its soma stays in the slice.

    `depth_um` is the soma's depth below the first face, `across` the unit vector from
    that face to the other.
    """
    angle = np.deg2rad(azimuth_deg)
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])

    def is_inside(point):
        depth = depth_um + float(across @ (turn @ point[:2]))
        return 0.0 <= depth <= thickness_um

    start, end = arbor.start_um[segment], arbor.end_um[segment]
    if not is_inside(start + fraction * (end - start)):
        return False
    while segment >= 0:
        if not is_inside(arbor.start_um[segment]):
            return False
        segment = arbor.parent[segment]
    return True
