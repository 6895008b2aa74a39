"""Somata that do not overlap: random sequential addition of hard spheres."""

from __future__ import annotations

import numpy as np

from circuitgen.column.volume import Volume
from circuitgen.core.draws import uniforms

# Random sequential addition of equal spheres stops near this share of the volume
# (Zhang & Torquato 2013, Phys Rev E 88:053312; value from memory).
SATURATION = 0.38
MOST_ATTEMPTS = 4000
_BATCH = 8


class PackingError(Exception):
    """A soma found no free place; lower the density or the soma's radius."""


class Packing:
    """Placed spheres, in a grid of cells as wide as the largest pair of radii."""

    def __init__(self, volume: Volume, largest_radius_um: float):
        self._volume = volume
        extent = volume.high_um - volume.low_um
        width = 2 * largest_radius_um
        self._shape = np.maximum(np.floor(extent / width), 1).astype(int)
        self._width = extent / self._shape
        self._cells: dict[tuple[int, int, int], list[tuple[float, ...]]] = {}

    def _neighbours(self, place: tuple[int, int, int]):
        """Yield the grid cells around one, with the shift of a periodic copy."""
        for step in np.ndindex(3, 3, 3):
            key, shift = [], []
            for axis in range(3):
                index, moved = place[axis] + step[axis] - 1, 0.0
                period = self._volume.wrap_um[axis] if axis < 2 else 0.0
                if period and not 0 <= index < self._shape[axis]:
                    turns = index // self._shape[axis]
                    index, moved = index - turns * self._shape[axis], turns * period
                key.append(int(index))
                shift.append(moved)
            yield tuple(key), shift

    def try_place(self, point: np.ndarray, radius_um: float) -> bool:
        """Place a sphere unless it would overlap another."""
        low = self._volume.low_um
        index = np.floor((point - low) / self._width).astype(int)
        place = tuple(np.clip(index, 0, self._shape - 1).tolist())
        x, y, z = point.tolist()
        for key, (dx, dy, dz) in self._neighbours(place):
            for other in self._cells.get(key, ()):
                a, b, c = other[0] + dx - x, other[1] + dy - y, other[2] + dz - z
                if a * a + b * b + c * c < (other[3] + radius_um) ** 2:
                    return False
        self._cells.setdefault(place, []).append((x, y, z, radius_um))
        return True

    def place(self, n: int, radius_um: float, low_z, high_z, key) -> np.ndarray:
        """Place n spheres with centres inside the volume between two heights.

        `key` is (seed, stage); the attempt of a soma is keyed by its index and the
        number of the attempt. Returns centres (n, 3); raises PackingError.
        """
        low, high = self._volume.low_um.copy(), self._volume.high_um.copy()
        low[2], high[2] = low_z, high_z
        out = np.zeros((n, 3))
        for begin in range(0, n, 1024):
            index = np.arange(begin, min(begin + 1024, n))
            self._place_some(index, radius_um, low, high, key, out)
        return out

    def _place_some(self, index, radius_um, low, high, key, out) -> None:
        tries = np.arange(_BATCH)
        draws = uniforms(*key, index[:, None], tries[None, :])[:, :3]
        points = low + draws * (high - low)
        inside = self._volume.contains(points).reshape(len(index), _BATCH)
        points = points.reshape(len(index), _BATCH, 3)
        for row, soma in enumerate(index):
            for attempt in np.flatnonzero(inside[row]):
                if self.try_place(points[row, attempt], radius_um):
                    out[soma] = points[row, attempt]
                    break
            else:
                out[soma] = self._insist(soma, radius_um, low, high, key)

    def _insist(self, soma, radius_um, low, high, key) -> np.ndarray:
        """Go on trying for a soma that found no place in the first attempts."""
        for begin in range(_BATCH, MOST_ATTEMPTS, 64):
            tries = np.arange(begin, begin + 64)
            points = low + uniforms(*key, soma, tries)[:, :3] * (high - low)
            for point in points[self._volume.contains(points)]:
                if self.try_place(point, radius_um):
                    return point
        raise PackingError
