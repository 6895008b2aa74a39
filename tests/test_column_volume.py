"""Volumes of the column's shapes against formulas and a mesh library."""

from __future__ import annotations

import math

import numpy as np
import pytest
import trimesh
from oracles_column import make_spec, make_type

from circuitgen.column import make_volume
from circuitgen.column.placement import cell_counts
from circuitgen.column.volume import read_mesh
from circuitgen.core.errors import InputError

PRISMS = [
    ({"shape": "cylinder", "diameter_um": 200.0}, math.pi * 100**2),
    # A regular hexagon: six triangles of height 100 and side 200 / sqrt(3).
    ({"shape": "hexagon", "across_flats_um": 200.0}, 6 * 100 * 100 / math.sqrt(3)),
    ({"shape": "box", "width_um": 120.0, "length_um": 70.0}, 120.0 * 70.0),
]


@pytest.mark.parametrize(("column", "area"), PRISMS)
@pytest.mark.parametrize(
    ("low", "high", "inside"),
    [(0, 400, 400), (50, 130, 80), (-50, 30, 30), (390, 500, 10), (410, 500, 0)],
)
def test_slabs_of_prisms_have_the_volume_of_the_formula(column, area, low, high, inside):
    volume = make_volume(make_spec(**column))
    found = volume.slab_volume_um3(low, high)
    assert found == pytest.approx(area * inside, rel=1e-12)


@pytest.mark.parametrize(("column", "area"), PRISMS)
def test_the_inside_of_a_prism_has_its_area(column, area):
    """Monte Carlo over the box around it: the error is binomial, 5 sigma allowed."""
    volume = make_volume(make_spec(**column))
    span = volume.high_um - volume.low_um
    n = 200_000
    points = volume.low_um + np.random.default_rng(0).uniform(size=(n, 3)) * span
    share = area * 400 / span.prod()
    hits = volume.contains(points).mean()
    assert hits == pytest.approx(
        share, abs=5 * math.sqrt(share * (1 - share) / n) + 1e-9
    )
    for shift in (span * [1.01, 0, 0], span * [0, 1.01, 0], span * [0, 0, 1.01]):
        assert not volume.contains(points + shift).any()


def test_the_corners_of_a_hexagon_lie_on_y():
    volume = make_volume(make_spec(shape="hexagon", across_flats_um=200.0))
    corner = 200 / math.sqrt(3)
    points = [
        (99.9, 0, 10),
        (0, corner - 0.1, 10),
        (99.9, corner / 2 - 0.1, 10),
        (100.1, 0, 10),
        (0, corner + 0.1, 10),
        (95, corner / 2 + 5, 10),
    ]
    inside = volume.contains(np.array(points, float))
    assert inside.tolist() == [True] * 3 + [False] * 3


def _cylinder(height=400.0, radius=100.0, sections=256):
    mesh = trimesh.creation.cylinder(radius=radius, height=height, sections=sections)
    mesh.apply_translation([0, 0, height / 2])
    return mesh


def _ball():
    mesh = trimesh.creation.icosphere(subdivisions=3, radius=200.0)
    mesh.apply_translation([30, -20, 200])
    return mesh


def _tilted_box():
    mesh = trimesh.creation.box(extents=[150, 90, 600])
    mesh.apply_transform(trimesh.transformations.rotation_matrix(0.2, [1, 0, 0]))
    mesh.apply_translation([500, 500, 200])
    return mesh


def _saved(mesh, folder, ending="ply"):
    path = folder / f"shape.{ending}"
    mesh.export(path)
    return path


@pytest.mark.parametrize("ending", ["stl", "obj", "ply", "glb"])
@pytest.mark.parametrize("make", [_cylinder, _ball, _tilted_box])
def test_slabs_of_a_mesh_sum_to_the_volume_of_the_mesh(tmp_path, make, ending):
    mesh = make()
    volume = read_mesh(_saved(mesh, tmp_path, ending), 400.0)
    heights = [-300, 0, 77.3, 200, 333, 800]
    slabs = [
        volume.slab_volume_um3(low, high)
        for low, high in zip(heights[:-1], heights[1:], strict=True)
    ]
    # The files keep single precision: 6e-8 of coordinates near 500.
    assert sum(slabs) == pytest.approx(mesh.volume, rel=1e-5)
    np.testing.assert_allclose(volume.low_um, mesh.bounds[0], atol=1e-3)


def test_a_slab_of_a_ball_has_the_volume_of_the_formula(tmp_path):
    """pi h (3 a^2 + 3 b^2 + h^2) / 6 for a spherical segment with end radii a, b."""
    mesh = trimesh.creation.icosphere(subdivisions=5, radius=200.0)
    mesh.apply_translation([0, 0, 200])
    volume = read_mesh(_saved(mesh, tmp_path), 400.0)
    low, high = 50.0, 230.0
    a2, b2 = (200**2 - (z - 200) ** 2 for z in (low, high))
    h = high - low
    exact = math.pi * h * (3 * a2 + 3 * b2 + h**2) / 6
    # 20,480 facets lie inside the sphere by 1 - cos of half their angle, about 5e-4.
    assert volume.slab_volume_um3(low, high) == pytest.approx(exact, rel=1e-3)


@pytest.mark.parametrize(("low", "high"), [(0, 100), (60, 61), (100, 400), (250, 260)])
def test_a_slab_of_a_tilted_box_has_the_volume_of_the_formula(tmp_path, low, high):
    """A box tilted about x has the same cross section between its ends."""
    volume = read_mesh(_saved(_tilted_box(), tmp_path), 400.0)
    exact = 150 * 90 / math.cos(0.2) * (high - low)
    assert volume.slab_volume_um3(low, high) == pytest.approx(exact, rel=1e-4)


def test_a_mesh_cylinder_equals_the_prism(tmp_path):
    spec = make_spec(make_type(density={"L1": 5e4, "L2": 1e5}))
    by_mesh = make_spec(*spec.cell_types, mesh=_saved(_cylinder(), tmp_path))
    prism, mesh = make_volume(spec), make_volume(by_mesh)
    # A polygon of 256 sides in a circle lacks 1 - sin(t) / t, t = 2 pi / 256: 1.0e-4.
    t = 2 * math.pi / 256
    lack = math.sin(t) / t
    for low, high in spec.layer_bounds_um:
        found = mesh.slab_volume_um3(low, high)
        assert found == pytest.approx(prism.slab_volume_um3(low, high) * lack, rel=1e-6)
    points = np.random.default_rng(1).uniform(
        [-110, -110, -20], [110, 110, 420], (2000, 3)
    )
    # Between the polygon's flats and the circle the two differ by right.
    apart = np.abs(np.hypot(points[:, 0], points[:, 1]) - 100) > 100 * (1 - math.cos(t))
    same = mesh.contains(points) == prism.contains(points)
    assert same[apart].all()
    assert prism.contains(points).any()
    counts = cell_counts(spec, prism), cell_counts(by_mesh, mesh)
    assert np.abs(counts[0] - counts[1]).max() <= 1


def _two_bodies():
    return trimesh.util.concatenate(
        [_cylinder(), _cylinder().apply_translation([500, 0, 0])]
    )


def _open_mesh():
    mesh = _cylinder()
    return trimesh.Trimesh(mesh.vertices, mesh.faces[:-3], process=False)


def _partly_inside_out():
    mesh = _cylinder()
    faces = mesh.faces.copy()
    faces[:10] = faces[:10, ::-1]
    return trimesh.Trimesh(mesh.vertices, faces, process=False)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (_open_mesh, "is not closed"),
        (_two_bodies, "holds 2 bodies"),
        (_partly_inside_out, "face inward and others outward"),
        (lambda: _cylinder(height=300.0), "reaches from z = 0 to 300"),
        (lambda: _cylinder().apply_scale(1e-3), "in micrometres"),
    ],
)
def test_meshes_that_cannot_be_used_say_why(tmp_path, make, words):
    path = _saved(make(), tmp_path)
    with pytest.raises(InputError) as caught:
        read_mesh(path, 400.0)
    assert words in str(caught.value)
    assert str(path) in str(caught.value)


@pytest.mark.parametrize("ending", ["stl", "obj", "ply", "glb", "txt"])
@pytest.mark.parametrize("content", [b"", b"no mesh at all\n", bytes(range(256)) * 4])
def test_files_that_are_no_mesh_are_refused(tmp_path, ending, content):
    path = tmp_path / f"shape.{ending}"
    path.write_bytes(content)
    with pytest.raises(InputError, match=r"cannot be read as a mesh|holds no triangle"):
        read_mesh(path, 400.0)


def test_a_mesh_turned_inside_out_is_turned_back(tmp_path):
    mesh = _cylinder()
    mesh.invert()
    volume = read_mesh(_saved(mesh, tmp_path), 400.0)
    assert volume.slab_volume_um3(0, 400) == pytest.approx(-mesh.volume, rel=1e-5)
