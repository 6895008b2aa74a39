"""Somata that do not overlap, and a density that is the same up to the edge.

Places are proposed uniformly at random and taken in turn when no soma is in the way
(random sequential addition). Proposals also fall just outside the volume and take
places there, as if the tissue went on: otherwise somata would crowd at the edge, where
nothing is in their way on one side.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from circuitgen.column import kernels
from circuitgen.column.volume import Volume
from circuitgen.core.draws import uniforms

# Share of the volume that equal spheres added at random fill when no other fits:
# Zhang & Torquato 2013, Phys Rev E 88:053312 (recalled from memory).
SATURATION = 0.38413
# Proposals per wanted soma after which a layer counts as full.
_MOST_TRIES = 4000
# How far the tissue goes on, in radii of the soma: its own edge is crowded.
_MARGIN_RADII = 4.0
_LEAST_AT_ONCE, _MOST_AT_ONCE = 256, 65536
_MOST_VOXELS = 8_000_000


@dataclass(frozen=True)
class Slab:
    """The part of a volume between two heights, and a place to draw from.

    Attributes
    ----------
    volume : Volume
        The whole.
    z_low_um, z_high_um : float
        The two heights.
    """

    volume: Volume
    z_low_um: float
    z_high_um: float

    @property
    def volume_um3(self) -> float:
        """Volume of the slab, in cubic micrometres."""
        return self.volume.slab_volume_um3(self.z_low_um, self.z_high_um)

    def contains(self, points_um: np.ndarray) -> np.ndarray:
        """Tell for points (n, 3) whether each is in the slab, shape (n,)."""
        z = points_um[:, 2]
        within = (z >= self.z_low_um) & (z < self.z_high_um)
        return within & self.volume.contains(points_um)

    def keeps(self, points_um: np.ndarray) -> np.ndarray:
        """Tell which places stay taken: not those in the heights of other layers."""
        z = points_um[:, 2]
        above = (z >= self.z_low_um) | (self.z_low_um <= 0)
        return above & ((z < self.z_high_um) | self._is_top)

    @property
    def _is_top(self) -> bool:
        return self.z_high_um >= self.volume.thickness_um


class Packing:
    """Places taken so far in and around a volume; somata never overlap.

    Parameters
    ----------
    volume : Volume
        Where cells are placed.
    widest_um : float
        Largest radius of any soma.
    """

    def __init__(self, volume: Volume, widest_um: float):
        self._volume = volume
        low, high = self._beyond(volume.box_um, widest_um)
        self._grid = _make_grid(low, high, 2 * widest_um, volume.wrap_um)
        self._places_n = 0
        self._places = kernels.Places(np.zeros((0, 3)), np.zeros(0), np.zeros(0, int))

    def _beyond(self, box, radius_um: float) -> tuple[np.ndarray, np.ndarray]:
        """Return a box widened, on its open sides, by the tissue that goes on."""
        margin = np.full(3, _MARGIN_RADII * radius_um)
        margin[:2][np.array(self._volume.wrap_um) > 0] = 0.0
        return box[0] - margin, box[1] + margin

    def fill(
        self, slab: Slab, wanted: int, radius_um: float, seed: int, stage: str
    ) -> np.ndarray:
        """Take places for `wanted` somata in a slab.

        Proposal i depends on the seed, the stage's name and i alone. Returns the
        centres, shape (n, 3), in the order in which they were taken; n is less than
        wanted when no place was found for the rest.
        """
        box = self._volume.slab_box_um(slab.z_low_um, slab.z_high_um)
        low, high = self._beyond(box, radius_um)
        per_cell = float(np.prod(high - low)) / slab.volume_um3
        most = int(_MOST_TRIES * per_cell * wanted)
        begin, tried, found = self._places_n, 0, []
        while wanted and tried < most:
            at_once = int(np.clip(2 * per_cell * wanted, _LEAST_AT_ONCE, _MOST_AT_ONCE))
            draws = uniforms(seed, stage, np.arange(tried, tried + at_once))
            points = low + draws[:, :3] * (high - low)
            is_cell = slab.contains(points)
            tried += at_once
            chosen = self._take(points, is_cell, radius_um, wanted)
            found.append(points[chosen[is_cell[chosen]]])
            wanted -= len(found[-1])
        self._give_up(begin, slab)
        return np.concatenate(found) if found else np.zeros((0, 3))

    def _take(self, points, is_cell, radius_um, wanted) -> np.ndarray:
        """Take what is free among proposals; returns those taken, in order."""
        self._make_room(len(points))
        chosen = np.zeros(len(points), np.int64)
        _, taken_n, _ = kernels.take_places(
            points,
            is_cell,
            float(radius_um),
            wanted,
            self._places_n,
            self._grid,
            self._places,
            chosen,
        )
        self._places_n += taken_n
        return chosen[:taken_n]

    def _make_room(self, more: int) -> None:
        need = self._places_n + more
        if need > len(self._places.radius):
            # Half as much again, so that growing costs little in all.
            grow = need + need // 2 - len(self._places.radius)
            self._places = kernels.Places(
                *(
                    np.concatenate([part, np.zeros((grow, *part.shape[1:]), part.dtype)])
                    for part in self._places
                )
            )

    def _give_up(self, begin: int, slab: Slab) -> None:
        """Free the places of this filling that other layers will fill themselves."""
        new = slice(begin, self._places_n)
        center, radius, _ = self._places
        stays = center[new][slab.keeps(center[new])]
        self._places_n = begin + len(stays)
        center[begin : self._places_n] = stays
        radius[begin : self._places_n] = radius[begin : begin + 1]
        kernels.link_all(self._places_n, self._grid, self._places)


def _make_grid(low, high, spacing_um: float, wrap_um) -> kernels.Grid:
    """Voxels over a box: no narrower than the spacing, and not too many."""
    extent = high - low
    size = max(spacing_um, math.cbrt(float(np.prod(extent)) / _MOST_VOXELS))
    shape = np.maximum(np.floor(extent / size), 1).astype(np.int64)
    return kernels.Grid(
        origin=low,
        size=extent / shape,
        shape=shape,
        head=np.full(int(shape.prod()), -1, np.int64),
        wrap_x=float(wrap_um[0]),
        wrap_y=float(wrap_um[1]),
    )
