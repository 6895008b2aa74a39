"""The piece of cortex: its shape, exact volumes of slabs, and what lies inside.

Circuit frame: x and y tangential, z toward the pia, z = 0 at the white-matter
boundary. Cylinder, hexagon and box are centred on x = y = 0.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from circuitgen.spec import ColumnSpec, Spec


@dataclass(frozen=True)
class Volume(ABC):
    """What every shape can tell.

    Attributes
    ----------
    thickness_um : float
        Thickness of the cortex; the volume lies between z = 0 and this z.
    wrap_um : tuple of float
        Periods in x and y; 0 where the edge is open.
    warnings : tuple of str
        What a user should know about the shape; empty when all is well.
    """

    thickness_um: float
    wrap_um: tuple[float, float]
    warnings: tuple[str, ...]

    @abstractmethod
    def contains(self, points_um: np.ndarray) -> np.ndarray:
        """Tell for points (n, 3) whether each is inside, shape (n,)."""

    @abstractmethod
    def slab_volume_um3(self, z_low_um: float, z_high_um: float) -> float:
        """Return the exact volume between two heights, in cubic micrometres."""

    @abstractmethod
    def slab_box_um(
        self, z_low_um: float, z_high_um: float
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return the lowest and highest corner of a box around a slab, each (3,).

        A slab without volume has a box without extent.
        """

    @property
    def box_um(self) -> tuple[np.ndarray, np.ndarray]:
        """Lowest and highest corner of a box around the volume, each (3,)."""
        return self.slab_box_um(0.0, self.thickness_um)

    @property
    def area_um2(self) -> float:
        """Tangential area: the mean cross-section over the thickness of the cortex."""
        return self.slab_volume_um3(0.0, self.thickness_um) / self.thickness_um


@dataclass(frozen=True)
class Prism(Volume):
    """A shape with the same cross-section at every depth.

    Attributes
    ----------
    section_um2 : float
        Area of the cross-section.
    half_width_um : tuple of float
        Half the extents of the cross-section along x and y.
    in_section : callable
        Tells for x (n,) and y (n,) which points the cross-section contains.
    """

    section_um2: float
    half_width_um: tuple[float, float]
    in_section: Callable[[np.ndarray, np.ndarray], np.ndarray]

    def contains(self, points_um: np.ndarray) -> np.ndarray:
        """Tell for points (n, 3) whether each is inside, shape (n,)."""
        x, y, z = np.asarray(points_um, dtype=np.float64).T
        return (z >= 0) & (z <= self.thickness_um) & self.in_section(x, y)

    def slab_volume_um3(self, z_low_um: float, z_high_um: float) -> float:
        """Return the exact volume between two heights, in cubic micrometres."""
        low, high = np.clip([z_low_um, z_high_um], 0.0, self.thickness_um)
        return self.section_um2 * max(float(high - low), 0.0)

    def slab_box_um(
        self, z_low_um: float, z_high_um: float
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return the lowest and highest corner of a box around a slab, each (3,)."""
        low, high = np.clip([z_low_um, z_high_um], 0.0, self.thickness_um)
        half = np.array(self.half_width_um)
        return np.array([*-half, low]), np.array([*half, max(low, high)])


def _cylinder(column: ColumnSpec) -> tuple:
    radius = column.diameter_um / 2
    return (
        math.pi * radius**2,
        (radius, radius),
        lambda x, y: x**2 + y**2 <= radius**2,
    )


def _hexagon(column: ColumnSpec) -> tuple:
    """Regular hexagon with two sides at right angles to x, one corner on +y."""
    apothem = column.across_flats_um / 2
    # sin and cos of 60 degrees: the other sides face 60 degrees away from x.
    high, low = math.sqrt(3) / 2, 0.5
    return (
        2 * math.sqrt(3) * apothem**2,
        (apothem, apothem / high),
        lambda x, y: (
            (np.abs(x) <= apothem) & (low * np.abs(x) + high * np.abs(y) <= apothem)
        ),
    )


def _box(column: ColumnSpec) -> tuple:
    half_x, half_y = column.width_um / 2, column.length_um / 2
    return (
        column.width_um * column.length_um,
        (half_x, half_y),
        lambda x, y: (np.abs(x) <= half_x) & (np.abs(y) <= half_y),
    )


_SECTIONS = {"cylinder": _cylinder, "hexagon": _hexagon, "box": _box}


def make_volume(spec: Spec) -> Volume:
    """Make the volume that a spec describes.

    Raises InputError, naming the file, when a mesh file does not hold one closed
    surface in micrometres around some part of the layers.
    """
    column = spec.column
    if column.shape == "mesh":
        # Imported here: the mesh library is slow to import and seldom needed.
        from circuitgen.column.mesh import read_mesh_volume

        return read_mesh_volume(spec)
    is_periodic = column.edges == "wrap"
    return Prism(
        spec.thickness_um,
        (column.width_um, column.length_um) if is_periodic else (0.0, 0.0),
        (),
        *_SECTIONS[column.shape](column),
    )
