"""Distances of points from straight pieces with a radius at each end."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


def feet(points: np.ndarray, start: np.ndarray, end: np.ndarray) -> np.ndarray:
    """Return where, from 0 at `start` to 1 at `end`, straight pieces are nearest.

    The arrays of points (…, 3) are broadcast against each other; a piece of no length
    gives 0.
    """
    step = end - start
    square = (step**2).sum(axis=-1)
    along = ((points - start) * step).sum(axis=-1)
    return np.clip(along / np.where(square > 0, square, 1.0), 0.0, 1.0)


@dataclass(frozen=True)
class Capsules:
    """k capsules: ends (k, 3) and radii (k,), in micrometres.

    A capsule is all spheres about its axis, their radius in proportion along it; so
    one cut in two is the same body.
    """

    start_um: np.ndarray
    end_um: np.ndarray
    start_radius_um: np.ndarray
    end_radius_um: np.ndarray

    def _nearest(self, points: np.ndarray):
        """Distance from each capsule's surface, and centre and radius of its sphere.

        At slope s of the radius, |p - x| - r(x) is least at s h / sqrt(1 - s^2)
        beyond the foot of p, which is at distance h from the axis.
        """
        step = self.end_um - self.start_um
        length = np.linalg.norm(step, axis=1)
        safe = np.where(length > 0, length, 1.0)
        way = step / safe[:, None]
        offset = points[:, None] - self.start_um
        along = (offset * way).sum(axis=2)
        height = np.linalg.norm(offset - along[..., None] * way, axis=2)
        widen = self.end_radius_um - self.start_radius_um
        # From a slope of 1 on, one end's sphere holds the whole capsule.
        slope = np.clip(widen / safe, -1 + 1e-12, 1 - 1e-12)
        along = np.clip(along + height * slope / np.sqrt(1 - slope**2), 0.0, length)
        axis = self.start_um + along[..., None] * way
        radius = self.start_radius_um + along / safe * widen
        return np.linalg.norm(points[:, None] - axis, axis=2) - radius, axis, radius

    def outside_um(self, points: np.ndarray) -> np.ndarray:
        """Distance of points (m, 3) from the surface, negative inside, shape (m,)."""
        return self._nearest(points)[0].min(axis=1)

    def on_surface(self, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return the points moved to the surface, those inside as they are.

        Also which capsule is nearest, shape (m,).
        """
        outside, axis, radius = self._nearest(points)
        which = outside.argmin(axis=1)
        rows = np.arange(len(points))
        axis, radius = axis[rows, which], radius[rows, which]
        away = np.linalg.norm(points - axis, axis=1)
        share = np.minimum(radius / np.where(away > 0, away, 1.0), 1.0)
        moved = axis + share[:, None] * (points - axis)
        is_outside = outside[rows, which] > 0
        return np.where(is_outside[:, None], moved, points), which

    @property
    def reach_um(self) -> float:
        """Largest distance of a point of the surface from the middle of the ends."""
        ends = np.concatenate([self.start_um, self.end_um])
        radii = np.concatenate([self.start_radius_um, self.end_radius_um])
        middle = (ends.min(axis=0) + ends.max(axis=0)) / 2
        return float((np.linalg.norm(ends - middle, axis=1) + radii).max())
