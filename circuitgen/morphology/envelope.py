"""Envelopes: where a neurite's carrier points lie, and how it leaves the soma.

Everything here is in the frame of the written file: soma centre at the origin,
columns x, y, z with y toward the pia. All randomness comes in as uniform numbers.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.special import betaincinv

from circuitgen.morphology.describe import Body, Neurite, Stems

# draw(purpose, n) gives n rows of four uniform numbers, the same for every call.
Draw = Callable[[str, int], np.ndarray]

EDGE_UM = 10.0  # carrier points keep this far from the pia and from white matter
CLEARANCE_UM = 6.0  # and this far outside the ends of the stems
SKELETON_STEP_UM = 8.0
LEAN = 0.06  # a trunk's end lies up to this share of its length off the axis
OFF_CENTRE = 0.2  # a body's centre lies up to this share of its radius off the axis
ROW_STEP_UM = 8.0
ROW_JITTER_UM = 1.0
_MORE = (2, 8, 32)  # draw this many times the points wanted; some fall outside


@dataclass(frozen=True)
class Site:
    """Where a cell grows: its soma, the cortex about it, and its sideways scale."""

    soma_depth_um: float
    soma_radius_um: float
    cortex_thickness_um: float
    scale: float


@dataclass(frozen=True)
class Skeleton:
    """The pieces that exist before growth begins: stems, or a trunk.

    Attributes
    ----------
    position_um : float64 (n, 3)
        Nodes, the first of every stem on the soma's surface.
    parent : int64 (n,)
        Node that each continues, -1 at the soma.
    path_um : float64 (n,)
        Path from the soma centre.
    """

    position_um: np.ndarray
    parent: np.ndarray
    path_um: np.ndarray


def _disc(radius_um: float, first: np.ndarray, second: np.ndarray) -> np.ndarray:
    """Points of a disc, density falling as 1 - (r/R)^2; columns x and z."""
    radius = radius_um * np.sqrt(1.0 - np.sqrt(1.0 - first))
    angle = 2.0 * np.pi * second
    return np.stack([radius * np.cos(angle), radius * np.sin(angle)], axis=1)


def _centre(body: Body, scale: float, draw: Draw, purpose: str) -> np.ndarray:
    row = draw(f"{purpose} centre", 1)
    return _disc(body.radius_um * scale * OFF_CENTRE, row[:, 0], row[:, 1])


def _ellipsoid(body: Body, low: float, high: float, site: Site, rows) -> np.ndarray:
    # r^2 ~ Beta(3/2, 2) makes the density fall as 1 - r^2, as in the disc.
    radius = np.sqrt(betaincinv(1.5, 2.0, rows[:, 0]))
    up = 2.0 * rows[:, 1] - 1.0
    aside = radius * np.sqrt(1.0 - up**2) * body.radius_um * site.scale
    angle = 2.0 * np.pi * rows[:, 2]
    height = (low + high) / 2.0 + radius * up * (high - low) / 2.0
    return np.stack([aside * np.cos(angle), height, aside * np.sin(angle)], axis=1)


def _cylinder(body: Body, low: float, high: float, site: Site, rows) -> np.ndarray:
    low = max(low, site.soma_depth_um - site.cortex_thickness_um + EDGE_UM)
    high = min(high, site.soma_depth_um - EDGE_UM)
    aside = _disc(body.radius_um * site.scale, rows[:, 0], rows[:, 1])
    height = low + (high - low) * rows[:, 2]
    return np.stack([aside[:, 0], height, aside[:, 1]], axis=1)


def _rows(body: Body, site: Site, draw: Draw, purpose: str, points_n: int):
    """Points along short vertical rows whose places fill a cylinder."""
    low, high = body.heights_um(site.soma_depth_um)
    per_row = int(body.row_length_um // ROW_STEP_UM) + 1
    row, step = np.divmod(np.arange(points_n), per_row)
    feet = draw(f"{purpose} rows", int(row[-1]) + 1)
    highest = max(high - body.row_length_um, low)
    foot = _cylinder(body, low, highest, site, feet)
    points = foot[row]
    points[:, 1] += step * ROW_STEP_UM
    jitter = draw(purpose, points_n)[:, :3] - 0.5
    return points + 2.0 * ROW_JITTER_UM * jitter


def _draw_body(body: Body, site: Site, draw: Draw, purpose: str, points_n: int):
    low, high = body.heights_um(site.soma_depth_um)
    if body.shape == "rows":
        points = _rows(body, site, draw, purpose, points_n)
    elif body.shape == "cylinder":
        points = _cylinder(body, low, high, site, draw(purpose, points_n))
    else:
        points = _ellipsoid(body, low, high, site, draw(purpose, points_n))
    points[:, [0, 2]] += _centre(body, site.scale, draw, purpose)
    return points


def carrier_points(
    body: Body, site: Site, draw: Draw, purpose: str, points_n: int, clear_um: float
) -> np.ndarray | None:
    """Draw carrier points in one body of an envelope.

    Points outside the cortex or within `clear_um` of the soma centre are left out;
    asking for more points keeps the earlier ones.

    Returns
    -------
    ndarray of float64, shape (points_n, 3), or None
        None when hardly any place is left in the body.
    """
    for more in _MORE:
        points = _draw_body(body, site, draw, purpose, points_n * more)
        depth = site.soma_depth_um - points[:, 1]
        inside = (depth > EDGE_UM) & (depth < site.cortex_thickness_um - EDGE_UM)
        inside &= (points**2).sum(axis=1) > clear_um**2
        if inside.sum() >= points_n:
            return points[inside][:points_n]
    return None


def _stem_directions(stems: Stems, draw: Draw) -> np.ndarray:
    rows = draw("stem count", 1)
    fewest, most = stems.count
    stems_n = fewest + int(rows[0, 0] * (most - fewest + 1))
    spread = draw("stems", stems_n)
    # Equal steps of azimuth with a third of a step of jitter keep stems apart.
    turn = np.arange(stems_n) + rows[0, 1] * stems_n + (spread[:, 0] - 0.5) * 0.66
    azimuth = 2.0 * np.pi * turn / stems_n
    low, high = np.sin(np.radians(stems.elevation_deg))
    # One stem in each stratum of equal solid angle, in random order.
    up = low + (high - low) * (np.argsort(spread[:, 2]) + spread[:, 1]) / stems_n
    aside = np.sqrt(1.0 - up**2)
    return np.stack([aside * np.cos(azimuth), up, aside * np.sin(azimuth)], axis=1)


def _lines(ends_um: np.ndarray, soma_radius_um: float) -> Skeleton:
    """Straight lines from the soma's surface to every end, in even steps."""
    positions, parents, paths = [], [], []
    nodes_n = 0
    for end in ends_um:
        length = float(np.sqrt((end**2).sum()))
        steps = max(int(np.ceil((length - soma_radius_um) / SKELETON_STEP_UM)), 1)
        path = np.linspace(min(soma_radius_um, length / 2), length, steps + 1)
        positions.append(path[:, None] * (end / length))
        paths.append(path)
        parents.append(np.r_[-1, nodes_n + np.arange(steps)])
        nodes_n += steps + 1
    return Skeleton(
        np.concatenate(positions), np.concatenate(parents), np.concatenate(paths)
    )


def clearance_um(neurite: Neurite, site: Site) -> float:
    """Return how far from the soma centre carrier points begin.

    A point behind the end of a stem would make the stem turn back on itself.
    """
    stem_um = neurite.bare_um if neurite.stems is not None else 0.0
    return max(stem_um, site.soma_radius_um) + CLEARANCE_UM


def lay_skeleton(neurite: Neurite, site: Site, draw: Draw) -> Skeleton:
    """Lay the stems or the trunk from which a neurite grows."""
    if neurite.stems is not None:
        directions = _stem_directions(neurite.stems, draw)
        return _lines(directions * neurite.bare_um, site.soma_radius_um)
    height = neurite.trunk.height_um(site.soma_depth_um)
    rows = draw("trunk", 1)
    aside = _disc(LEAN * abs(height), rows[:, 0], rows[:, 1])
    return _lines(
        np.stack([aside[:, 0], [height], aside[:, 1]], axis=1), site.soma_radius_um
    )
