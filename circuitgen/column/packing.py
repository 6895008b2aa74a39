"""Somata that do not overlap, and a density that is the same up to the edge.

Places are proposed uniformly at random and taken in turn when no soma is in the way
(random sequential addition). Proposals also fall just outside the volume and take
places there, as if the tissue went on: otherwise somata would crowd at the edge, where
nothing is in their way on one side.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from circuitgen.column import kernels
from circuitgen.column.volume import Volume
from circuitgen.core.draws import uniforms

# Share of the volume that equal spheres added at random fill when no other fits:
# Zhang & Torquato 2013, Phys Rev E 88:053312 (recalled from memory).
SATURATION = 0.38413
# Proposals per wanted soma after which a layer counts as full.
_MOST_TRIES = 1000
# How far the tissue goes on, in radii of the soma: its own edge is crowded.
_MARGIN_RADII = 4.0
# Turns in which the layers of a type are filled.
_TURNS = 16
_LEAST_AT_ONCE, _MOST_AT_ONCE = 256, 65536
_MOST_VOXELS = 8_000_000


@dataclass(frozen=True)
class Slab:
    """The part of a volume between two heights.

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

    def widened_box_um(self, margin_um: float) -> tuple[np.ndarray, np.ndarray]:
        """Return a box around the slab, widened where the volume ends openly."""
        low, high = self.volume.slab_box_um(self.z_low_um, self.z_high_um)
        is_open = np.array(self.volume.wrap_um) == 0
        is_bottom = self.z_low_um <= 0
        is_top = self.z_high_um >= self.volume.thickness_um
        return (
            low - margin_um * np.array([*is_open, is_bottom]),
            high + margin_um * np.array([*is_open, is_top]),
        )


@dataclass
class _Filling:
    """Somata of one type and layer, part of them placed."""

    slab: Slab
    wanted: int
    seed: int
    stage: str
    low: np.ndarray
    high: np.ndarray
    tried: int = 0
    found: int = 0
    centers: list[np.ndarray] = field(default_factory=list)

    @property
    def boxes_n(self) -> float:
        """How often the slab fits into the box that proposals come from."""
        return float(np.prod(self.high - self.low)) / self.slab.volume_um3

    def propose(self, more: int) -> np.ndarray:
        """Return the next proposals, about enough for `more` somata."""
        # An eighth of all so far keeps the calls few when most proposals fail.
        likely = max(2 * self.boxes_n * more, self.tried / 8)
        at_once = int(np.clip(likely, _LEAST_AT_ONCE, _MOST_AT_ONCE))
        ids = np.arange(self.tried, self.tried + at_once)
        draws = uniforms(self.seed, self.stage, ids)
        return self.low + draws[:, :3] * (self.high - self.low)


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
        whole = Slab(volume, 0.0, volume.thickness_um)
        box = whole.widened_box_um(_MARGIN_RADII * widest_um)
        self._grid = _make_grid(*box, 2 * widest_um, volume.wrap_um)
        self._places_n = 0
        self._places = kernels.Places(np.zeros((0, 3)), np.zeros(0), np.zeros(0, int))

    def fill(
        self,
        slabs: Sequence[Slab],
        wanted: Sequence[int],
        radius_um: float,
        seed: int,
        stages: Sequence[str],
    ) -> list[np.ndarray]:
        """Take places for somata of one radius in several slabs.

        Proposal i of a slab depends on the seed, the slab's stage name and i alone.
        The slabs are filled in turns, a share at a time, so that neither side of a
        border is full before the other.

        Returns
        -------
        list of float64 (n, 3)
            Centres in each slab, in the order in which they were taken; n is less than
            wanted when no place was found for the rest.
        """
        margin = _MARGIN_RADII * radius_um
        fillings = [
            _Filling(slab, count, seed, stage, *slab.widened_box_um(margin))
            for slab, count, stage in zip(slabs, wanted, stages, strict=True)
        ]
        for turn in range(1, _TURNS + 1):
            for filling in fillings:
                self._fill_up_to(filling.wanted * turn // _TURNS, filling, radius_um)
        return [np.concatenate(one.centers or [np.zeros((0, 3))]) for one in fillings]

    def _fill_up_to(self, goal: int, filling: _Filling, radius_um: float) -> None:
        most = _MOST_TRIES * filling.boxes_n * filling.wanted
        while (more := goal - filling.found) > 0 and filling.tried < most:
            points = filling.propose(more)
            is_cell = filling.slab.contains(points)
            self._make_room(len(points))
            chosen = np.zeros(len(points), np.int64)
            seen, taken_n = kernels.take_places(
                points,
                is_cell,
                float(radius_um),
                more,
                self._places_n,
                self._grid,
                self._places,
                chosen,
            )
            chosen = chosen[:taken_n]
            filling.centers.append(points[chosen[is_cell[chosen]]])
            filling.found += len(filling.centers[-1])
            filling.tried += seen
            self._places_n += taken_n

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
