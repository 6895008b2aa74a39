"""Closed mesh files as volumes, and every way in which a file is not one."""

from __future__ import annotations

import math

import numpy as np
import pytest
import shapely
import trimesh
from builders_column import CYLINDER, make_spec
from oracles_column import solid_angle_winding

from circuitgen.column import make_volume
from circuitgen.core.errors import InputError

LAYERS = {"L1": 120, "L23": 300, "L4": 180}


def solid_cylinder(sections=64, height=600.0, radius=150.0):
    mesh = trimesh.creation.cylinder(radius=radius, height=height, sections=sections)
    mesh.apply_translation([0, 0, 300])
    return mesh


def curved_slab():
    """Return a bent, skewed solid that no axis is kind to."""
    mesh = trimesh.creation.icosphere(subdivisions=3, radius=1.0)
    vertices = mesh.vertices * [180, 140, 330]
    vertices[:, 0] += 0.0006 * (vertices[:, 2] ** 2) + 0.2 * vertices[:, 1]
    return trimesh.Trimesh(vertices + [400, -250, 300], mesh.faces)


def volume_of(mesh, folder, ending="ply", layers=LAYERS):
    file = folder / f"cortex.{ending}"
    mesh.export(file)
    return make_volume(make_spec({"shape": "mesh", "file": file}, layers))


@pytest.mark.parametrize("ending", ["stl", "obj", "ply", "glb"])
def test_every_format_gives_the_same_volume(tmp_path, ending):
    volume = volume_of(curved_slab(), tmp_path, ending)
    expected = curved_slab()
    for normal, height in ((1, 0), (-1, 600)):
        expected = trimesh.intersections.slice_mesh_plane(
            expected, [0, 0, normal], [0, 0, height]
        )
    # Files hold single-precision or eight-digit numbers.
    assert np.array(volume.box_um) == pytest.approx(expected.bounds, rel=1e-6, abs=1e-4)
    assert volume.slab_volume_um3(0, 600) == pytest.approx(capped_volume(), rel=1e-6)


def capped_volume():
    """Return the volume of the curved slab within the cortex, from cross-sections.

    Gauss's rule over the areas of horizontal sections, polygons of shapely.
    """
    mesh = curved_slab()
    total = 0.0
    # Between two heights of corners the section's area is a quadratic of height.
    inner = mesh.vertices[:, 2]
    heights = np.unique(np.clip(np.append(inner, [0, 600]), 0, 600))
    nodes, weights = np.polynomial.legendre.leggauss(2)
    for low, high in zip(heights[:-1], heights[1:], strict=True):
        for node, weight in zip(nodes, weights, strict=True):
            z = (low + high) / 2 + node * (high - low) / 2
            lines = trimesh.intersections.mesh_plane(mesh, [0, 0, 1], [0, 0, z])
            (polygon,) = shapely.polygonize(
                [shapely.LineString(np.round(line[:, :2], 9)) for line in lines]
            ).geoms
            total += weight * (high - low) / 2 * polygon.area
    return total


def test_cylinder_of_triangles_approaches_the_cylinder(tmp_path):
    exact = make_volume(make_spec(CYLINDER, LAYERS))
    for sections in (16, 64, 256):
        # Area of a regular polygon of n corners over that of its circle.
        angle = 2 * math.pi / sections
        share = math.sin(angle) / angle
        meshed = volume_of(solid_cylinder(sections), tmp_path)
        for low, high in ((480, 600), (180, 480), (0, 180)):
            expected = share * exact.slab_volume_um3(low, high)
            assert meshed.slab_volume_um3(low, high) == pytest.approx(expected, rel=1e-6)
    points = np.random.default_rng(1).uniform(-160, 760, (20_000, 3))
    radius = np.hypot(points[:, 0], points[:, 1])
    # 256 corners: the polygon lies between 150 cos(pi/256) and 150 um.
    clear = np.abs(radius - 150) > 0.02
    assert (meshed.contains(points) == exact.contains(points))[clear].all()


def test_whole_volume_is_that_of_the_mesh_library(tmp_path):
    mesh = curved_slab()
    mesh.apply_translation([0, 0, 50])
    volume = volume_of(mesh, tmp_path, layers={"L1": 800})
    assert volume.slab_volume_um3(0, 800) == pytest.approx(mesh.volume, rel=1e-6)


def test_slab_volumes_add_up_and_match_an_ellipsoid(tmp_path):
    unit = trimesh.creation.icosphere(subdivisions=5, radius=1.0)
    # The mesh lies in the unit ball and around the ball that touches its faces.
    inner = np.min(np.sum(unit.triangles_center * unit.face_normals, axis=1))
    mesh = unit.copy()
    mesh.apply_transform(np.diag([200.0, 150.0, 300.0, 1.0]))
    mesh.apply_translation([0, 0, 300])
    volume = volume_of(mesh, tmp_path)

    def ellipsoid_up_to(z, scale):
        # pi a b times the integral of scale^2 - (t/c)^2.
        t = np.clip(z - 300, -300 * scale, 300 * scale)
        return math.pi * 200 * 150 * (scale**2 * t - t**3 / (3 * 300**2))

    heights = np.linspace(0, 600, 13)
    slabs = [
        volume.slab_volume_um3(low, high)
        for low, high in zip(heights[:-1], heights[1:], strict=True)
    ]
    assert sum(slabs) == pytest.approx(volume.slab_volume_um3(0, 600), rel=1e-12)
    assert (slabs <= np.diff(ellipsoid_up_to(heights, 1.0)) * (1 + 1e-6)).all()
    assert (slabs >= np.diff(ellipsoid_up_to(heights, inner)) * (1 - 1e-6)).all()


def test_contains_agrees_with_solid_angles(tmp_path):
    volume = volume_of(curved_slab(), tmp_path)
    low, high = volume.box_um
    points = np.random.default_rng(2).uniform(low - 20, high + 20, (300, 3))
    inside = [
        0 <= point[2] <= 600 and solid_angle_winding(point, volume.corners_um) == 1
        for point in points
    ]
    assert 50 < sum(inside) < 250
    assert volume.contains(points).tolist() == inside


def test_no_point_falls_between_triangles(tmp_path):
    # All on edges and corners of the triangles as seen from above.
    volume = volume_of(trimesh.creation.box(extents=[200, 200, 600]), tmp_path)
    steps = np.linspace(-100, 100, 41)
    x, y = np.meshgrid(steps[1:-1], steps[1:-1])
    points = np.column_stack([x.ravel(), y.ravel(), np.full(x.size, 150.0)])
    assert volume.contains(points).all()
    points[:, 2] = 310.0
    assert not volume.contains(points).any()


def box_at(*place, extents=(200, 200, 600)):
    mesh = trimesh.creation.box(extents=extents)
    mesh.apply_translation(place)
    return mesh


def open_box():
    mesh = box_at(0, 0, 300)
    return trimesh.Trimesh(mesh.vertices, mesh.faces[1:])


def inside_out():
    mesh = box_at(0, 0, 300)
    mesh.invert()
    return mesh


def mixed_faces():
    mesh = box_at(0, 0, 300)
    faces = mesh.faces.copy()
    faces[0] = faces[0, ::-1]
    return trimesh.Trimesh(mesh.vertices, faces, process=False)


def hollow():
    inner = box_at(0, 0, 300, extents=(100, 100, 300))
    inner.invert()
    return trimesh.util.concatenate([box_at(0, 0, 300), inner])


def through_itself():
    """Return an ellipsoid bent to more than a full circle, so that its ends overlap."""
    mesh = trimesh.creation.icosphere(subdivisions=4, radius=1.0)
    along, across, up = mesh.vertices.T
    angle, radius = np.deg2rad(240) * along, 150 - 60 * across
    vertices = [radius * np.cos(angle), radius * np.sin(angle), 300 + 290 * up]
    return trimesh.Trimesh(np.column_stack(vertices), mesh.faces)


def scaled(factor):
    mesh = box_at(0, 0, 300)
    mesh.apply_scale(factor)
    return mesh


@pytest.mark.parametrize(
    ("mesh", "word"),
    [
        (open_box(), "is not closed: 3 edges"),
        (inside_out(), "is inside out"),
        (mixed_faces(), "face both ways"),
        (trimesh.util.concatenate([box_at(0, 0, 300), box_at(500, 0, 300)]), "holds 2"),
        (hollow(), "holds 2 separate surfaces"),
        (through_itself(), "passes through itself"),
        (scaled(1e-3), "from millimetres, multiply by 1000"),
        (scaled(1e3), "from nanometres, divide by 1000"),
        (box_at(0, 0, -900), "outside the layers"),
    ],
)
@pytest.mark.parametrize("ending", ["ply", "stl"])
def test_unusable_mesh_is_refused_with_file_and_remedy(tmp_path, mesh, word, ending):
    with pytest.raises(InputError, match=word) as caught:
        volume_of(mesh, tmp_path, ending)
    (problem,) = caught.value.problems
    assert problem.file == str(tmp_path / f"cortex.{ending}")


@pytest.mark.parametrize(
    ("ending", "content", "word"),
    [
        ("stl", b"", "cortex.stl: "),
        ("stl", b"solid nothing\nendsolid nothing\n", "cortex.stl: "),
        ("stl", b"not a mesh at all", "cortex.stl: "),
        ("obj", b"# empty\n", "cortex.obj: "),
        ("obj", b"v 0 0 0\nv 1 0 0\nv 0 1 0\n", "cortex.obj: "),
        ("obj", b"\x00\x01\x02", "cortex.obj: "),
        ("ply", b"ply\nformat ascii 1.0\nelement vertex 3\n", "cortex.ply: "),
        ("glb", b"glTF\x02\x00\x00\x00", "cortex.glb: "),
        ("obj", b"v 0 0 nan\nv 1 0 0\nv 0 1 0\nf 1 2 3\n", "not finite"),
    ],
)
def test_broken_file_is_refused_without_traceback(tmp_path, ending, content, word):
    file = tmp_path / f"cortex.{ending}"
    file.write_bytes(content)
    with pytest.raises(InputError, match=word):
        make_volume(make_spec({"shape": "mesh", "file": file}, LAYERS))


def test_missing_file_is_named(tmp_path):
    file = tmp_path / "absent.stl"
    with pytest.raises(InputError, match="absent.stl: cannot be read"):
        make_volume(make_spec({"shape": "mesh", "file": file}, LAYERS))


def test_mesh_off_the_layers_warns(tmp_path):
    assert volume_of(box_at(0, 0, 300), tmp_path).warnings == ()
    short = volume_of(box_at(0, 0, 200, extents=(200, 200, 400)), tmp_path)
    (warning,) = short.warnings
    assert "ends 200 um short of the pia" in warning
    high = volume_of(box_at(0, 0, 400, extents=(200, 200, 800)), tmp_path)
    (warning,) = high.warnings
    assert "25.0% of its volume lies outside" in warning
    assert high.slab_volume_um3(-1e9, 1e9) == pytest.approx(200 * 200 * 600)
