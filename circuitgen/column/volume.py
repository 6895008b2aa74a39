"""The volume of cortex: cylinder, hexagonal prism, box or closed mesh."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

import numpy as np

from circuitgen.core.errors import InputError, Problem
from circuitgen.spec import Spec


class Volume(Protocol):
    """What every shape can tell; micrometres throughout."""

    low_um: np.ndarray
    high_um: np.ndarray
    wrap_um: tuple[float, float]

    def contains(self, points_um: np.ndarray) -> np.ndarray:
        """Tell for points (n, 3) whether they lie inside."""

    def slab_volume_um3(self, low_um: float, high_um: float) -> float:
        """Return the volume between two heights."""


@dataclass(frozen=True)
class Prism:
    """A shape that is the same at every height, about the axis x = y = 0.

    `side_um` is a diameter, the distance across flats (flats face +-x), or the widths
    in x and y.
    """

    shape: str
    side_um: tuple[float, float]
    thickness_um: float
    wrap_um: tuple[float, float] = (0.0, 0.0)

    @property
    def area_um2(self) -> float:
        """Tangential area."""
        a, b = self.side_um
        if self.shape == "cylinder":
            return np.pi * a**2 / 4
        return np.sqrt(3) / 2 * a**2 if self.shape == "hexagon" else a * b

    @property
    def high_um(self) -> np.ndarray:
        """Highest corner of the box around the shape."""
        a, b = self.side_um
        if self.shape == "hexagon":
            b = 2 * a / np.sqrt(3)
        return np.array([a / 2, b / 2, self.thickness_um])

    @property
    def low_um(self) -> np.ndarray:
        """Lowest corner of the box around the shape."""
        return self.high_um * [-1, -1, 0]

    def contains(self, points_um: np.ndarray) -> np.ndarray:
        """Tell for points (n, 3) whether they lie inside."""
        x, y, z = np.asarray(points_um, float).T
        inside = (z >= 0) & (z <= self.thickness_um)
        a, b = np.array(self.side_um) / 2
        if self.shape == "cylinder":
            return inside & (x**2 + y**2 <= a**2)
        inside &= np.abs(x) <= a
        if self.shape == "box":
            return inside & (np.abs(y) <= b)
        return inside & (np.abs(x) / 2 + np.abs(y) * np.sqrt(3) / 2 <= a)

    def slab_volume_um3(self, low_um: float, high_um: float) -> float:
        """Return the volume between two heights."""
        low, high = max(low_um, 0.0), min(high_um, self.thickness_um)
        return float(self.area_um2 * max(high - low, 0.0))


class MeshVolume:
    """A closed surface, its coordinates those of the circuit frame."""

    wrap_um = (0.0, 0.0)

    def __init__(self, mesh):
        self._mesh = mesh
        self.low_um, self.high_um = np.array(mesh.bounds, float)

    def contains(self, points_um: np.ndarray) -> np.ndarray:
        """Tell for points (n, 3) whether they lie inside, by ray casting."""
        return self._mesh.contains(np.asarray(points_um, float))

    def slab_volume_um3(self, low_um: float, high_um: float) -> float:
        """Return the volume between two heights.

        The divergence theorem with the field (x, 0, 0): the flat faces of the slab have
        no normal along x, so only the surface between the two heights counts.
        """
        from trimesh.intersections import slice_mesh_plane

        part = self._mesh
        for height, way in ((low_um, 1.0), (high_um, -1.0)):
            part = slice_mesh_plane(part, [0, 0, way], [0, 0, height])
            if not len(part.faces):
                return 0.0
        middle_x = part.triangles[:, :, 0].mean(axis=1)
        cross = np.cross(
            part.triangles[:, 1] - part.triangles[:, 0],
            part.triangles[:, 2] - part.triangles[:, 0],
        )
        return float((middle_x * cross[:, 0] / 2).sum())


def _refuse(path: Path, rule: str) -> InputError:
    return InputError([Problem(str(path), None, "", rule)])


def read_mesh(path: Path, thickness_um: float) -> MeshVolume:
    """Read a closed mesh (STL, OBJ, PLY, GLB) in micrometres of the circuit frame.

    Raises InputError when it cannot be read, is not closed, is several bodies, or does
    not reach the cortex from z = 0 to its thickness.
    """
    import trimesh

    try:
        mesh = trimesh.load(path, force="mesh")
    except Exception as error:  # the readers of the library raise anything
        raise _refuse(path, f"cannot be read as a mesh: {error}") from None
    if not len(getattr(mesh, "faces", ())):
        raise _refuse(path, "holds no triangle")
    mesh.merge_vertices()
    if not mesh.is_watertight:
        rule = "is not closed (some edge does not join two triangles): fill its holes"
        raise _refuse(path, rule)
    if not mesh.is_winding_consistent:
        rule = "has triangles that face inward and others outward: unify its normals"
        raise _refuse(path, rule)
    if mesh.body_count != 1:
        raise _refuse(path, f"holds {mesh.body_count} bodies; one is needed")
    if mesh.volume < 0:
        mesh.invert()
    low, high = mesh.bounds[:, 2]
    if low > 0.01 * thickness_um or high < 0.99 * thickness_um:
        rule = (
            f"reaches from z = {low:.4g} to {high:.4g}, the layers from 0 to"
            f" {thickness_um:g}: the mesh must hold the cortex, in micrometres"
        )
        raise _refuse(path, rule)
    return MeshVolume(mesh)


def make_volume(spec: Spec) -> Volume:
    """Return the volume that a spec describes."""
    column, thickness = spec.column, spec.thickness_um
    if column.shape == "mesh":
        return read_mesh(spec.column.file, thickness)
    if column.shape == "box":
        sides = (column.width_um, column.length_um)
        wrap = sides if column.edges == "wrap" else (0.0, 0.0)
        return Prism("box", sides, thickness, wrap)
    side = column.diameter_um if column.shape == "cylinder" else column.across_flats_um
    return Prism(column.shape, (side, side), thickness)
