"""A closed mesh file as the volume of cortex."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import trimesh

from circuitgen.column import kernels
from circuitgen.column.volume import Volume
from circuitgen.core.draws import uniforms
from circuitgen.core.errors import InputError, Problem
from circuitgen.spec import Spec

# A mesh this many times thicker or thinner than the cortex is in other units.
_UNIT_RATIO = 50.0
_MOST_TILES_ALONG = 512
_PROBES_N = 4096
# A shortfall of the mesh against the layers that is worth a word.
_WORTH_WARNING = 0.01


@dataclass(frozen=True)
class MeshVolume(Volume):
    """The part of a closed mesh that lies within the cortex.

    Attributes
    ----------
    corners_um : float64 (triangles, 3, 3)
        Corners of every triangle, counter-clockwise seen from outside.
    tiles : kernels.Tiles
        The triangles by place in the x-y plane.
    """

    corners_um: np.ndarray
    tiles: kernels.Tiles

    def contains(self, points_um: np.ndarray) -> np.ndarray:
        """Tell for points (n, 3) whether each is inside, shape (n,)."""
        points = np.ascontiguousarray(points_um, dtype=np.float64)
        z = points[:, 2]
        in_cortex = (z >= 0) & (z <= self.thickness_um)
        return in_cortex & (windings(points, self.corners_um, self.tiles) != 0)

    def _clipped(self, z_low_um: float, z_high_um: float) -> np.ndarray:
        low, high = np.clip([z_low_um, z_high_um], 0.0, self.thickness_um)
        return clip_triangles(self.corners_um, float(low), float(high))

    def slab_volume_um3(self, z_low_um: float, z_high_um: float) -> float:
        """Return the exact volume between two heights, in cubic micrometres."""
        return enclosed_volume(self._clipped(z_low_um, z_high_um))

    def slab_box_um(
        self, z_low_um: float, z_high_um: float
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return the lowest and highest corner of a box around a slab, each (3,)."""
        # From any point inside, a walk along x or y meets the surface at its height:
        # the surface within the slab has the same box as what it encloses.
        corners = self._clipped(z_low_um, z_high_um).reshape(-1, 3)
        if not corners.size:
            return np.zeros(3), np.zeros(3)
        return corners.min(axis=0), corners.max(axis=0)


def clip_triangles(corners: np.ndarray, z_low: float, z_high: float) -> np.ndarray:
    """Return the parts of triangles (n, 3, 3) between two heights, as triangles."""
    if z_high <= z_low:
        return np.zeros((0, 3, 3))
    vertices = corners.reshape(-1, 3)
    faces = np.arange(len(vertices)).reshape(-1, 3)
    for height, side in ((z_low, 1.0), (z_high, -1.0)):
        vertices, faces, _ = trimesh.intersections.slice_faces_plane(
            vertices, faces, [0.0, 0.0, side], [0.0, 0.0, height]
        )
    return vertices[faces]


def enclosed_volume(corners: np.ndarray) -> float:
    """Return the volume inside a surface whose open ends are flat in z.

    By the divergence theorem it is the integral of x n_x over the surface; caps at
    one height have n_x = 0 and need not be there.
    """
    if not len(corners):
        return 0.0
    # Differences from the middle keep the digits of a mesh far from the origin.
    middle = (corners[..., 0].min() + corners[..., 0].max()) / 2
    edge, other = corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]
    area_x = (edge[:, 1] * other[:, 2] - edge[:, 2] * other[:, 1]) / 2
    return float(np.sum(area_x * (corners[..., 0].mean(axis=1) - middle)))


def tile_triangles(corners: np.ndarray) -> kernels.Tiles:
    """List triangles by square tiles of the x-y plane."""
    flat = corners[..., :2].reshape(-1, 2)
    low, extent = flat.min(axis=0), np.ptp(flat, axis=0)
    along = min(max(math.isqrt(len(corners)), 1), _MOST_TILES_ALONG)
    size = float(extent.max()) / along * (1 + 1e-9)
    shape = np.maximum(np.ceil(extent / size), 1).astype(np.int64)
    first = np.zeros(int(shape.prod()) + 1, np.int64)
    place = (corners, low, size, shape)
    kernels.list_triangles(*place, first, np.zeros(0, np.int32), True)
    np.cumsum(first, out=first)
    triangles = np.zeros(int(first[-1]), np.int32)
    kernels.list_triangles(*place, first[:-1].copy(), triangles, False)
    return kernels.Tiles(low, size, shape, first, triangles)


def windings(points: np.ndarray, corners: np.ndarray, tiles) -> np.ndarray:
    """Return how often the surface winds around each point, shape (n,)."""
    out = np.zeros(len(points), np.int64)
    kernels.winding_numbers(points, corners, tiles, out)
    return out


def _refuse(file: Path, rule: str) -> None:
    raise InputError([Problem(str(file), None, "", rule)])


def _load(file: Path) -> trimesh.Trimesh:
    """Read the triangles of a file, with doubled corners joined."""
    try:
        scene = trimesh.load_scene(str(file), skip_materials=True, process=False)
        mesh = scene.to_mesh()
    except OSError as error:
        _refuse(file, f"cannot be read: {error.strerror or error}")
    except Exception as error:  # readers of broken files raise anything
        _refuse(file, f"cannot be read as a mesh ({error}); export it again")
    if not len(mesh.faces):
        _refuse(file, "holds no triangles; export the surface, not points or curves")
    if not np.isfinite(mesh.vertices).all():
        _refuse(file, "has corners that are not finite numbers; export it again")
    # Only places matter: corners that differ in colour or texture are one corner.
    return trimesh.Trimesh(mesh.vertices, mesh.faces, process=True)


def _check_closed(file: Path, mesh: trimesh.Trimesh) -> None:
    if not mesh.is_watertight:
        edges = np.sort(mesh.edges, axis=1)
        _, uses = np.unique(edges, axis=0, return_counts=True)
        open_n = int(np.count_nonzero(uses != 2))
        _refuse(
            file,
            f"is not closed: {open_n} edges do not join exactly two triangles; "
            "fill the holes and remove doubled faces in a mesh editor",
        )
    if mesh.body_count != 1:
        _refuse(
            file,
            f"holds {mesh.body_count} separate surfaces; keep the one that bounds "
            "the piece of cortex",
        )
    if not mesh.is_winding_consistent:
        _refuse(
            file,
            "has triangles that face both ways; recalculate the normals outward",
        )


def _check_units(file: Path, mesh: trimesh.Trimesh, thickness_um: float) -> None:
    height = float(np.ptp(mesh.vertices[:, 2]))
    rule = (
        f"is {height:.4g} high in z and the layers are {thickness_um:g} um thick; "
        "a mesh is in micrometres with z toward the pia"
    )
    if height * _UNIT_RATIO < thickness_um:
        _refuse(file, f"{rule}: from millimetres, multiply by 1000")
    if height > thickness_um * _UNIT_RATIO:
        _refuse(file, f"{rule}: from nanometres, divide by 1000")


def _check_windings(file: Path, mesh: trimesh.Trimesh, corners, tiles) -> None:
    if mesh.volume < 0:
        _refuse(file, "is inside out; turn its triangles so that normals point outward")
    low, high = mesh.bounds
    probes = low + (high - low) * uniforms(0, "mesh probes", range(_PROBES_N))[:, :3]
    if not np.isin(windings(probes, corners, tiles), (0, 1)).all():
        _refuse(file, "passes through itself; make one simple closed surface of it")


def _warnings(file: Path, mesh: trimesh.Trimesh, inside: float, thickness: float):
    low, high = mesh.bounds[:, 2]
    span = f"{file}: spans z {low:.4g} to {high:.4g} um, the layers 0 to {thickness:g}"
    outside = 1 - inside / mesh.volume
    if outside > _WORTH_WARNING:
        yield f"{span}; {outside:.1%} of its volume lies outside and stays empty"
    for gap, boundary in ((low, "white matter"), (thickness - high, "pia")):
        if gap > _WORTH_WARNING * thickness:
            yield f"{span}; it ends {gap:.4g} um short of the {boundary}"


def read_mesh_volume(spec: Spec) -> MeshVolume:
    """Read the closed mesh of a spec; InputError, naming the file, if it is not one."""
    file, thickness = spec.column.file, spec.thickness_um
    mesh = _load(file)
    _check_units(file, mesh, thickness)
    _check_closed(file, mesh)
    corners = np.ascontiguousarray(mesh.triangles, dtype=np.float64)
    tiles = tile_triangles(corners)
    _check_windings(file, mesh, corners, tiles)
    inside = enclosed_volume(clip_triangles(corners, 0.0, thickness))
    if inside <= 0:
        low, high = mesh.bounds[:, 2]
        _refuse(
            file,
            f"spans z {low:.4g} to {high:.4g} um, outside the layers (0 to "
            f"{thickness:g} um); move it so that the white-matter boundary is z = 0",
        )
    warnings = tuple(_warnings(file, mesh, inside, thickness))
    return MeshVolume(thickness, (0.0, 0.0), warnings, corners, tiles)
