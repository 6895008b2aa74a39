"""Shapes of the column: areas, exact slab volumes, what is inside."""

from __future__ import annotations

import math

import numpy as np
import pytest
import shapely
from builders_column import BOX, CYLINDER, HEXAGON, make_spec

from circuitgen.column import make_volume

LAYERS = {"L1": 120, "L23": 300, "L4": 180}
SHAPES = {"box": BOX, "cylinder": CYLINDER, "hexagon": HEXAGON}


def outline(shape):
    """Cross-section as a polygon of shapely, an independent library of the plane."""
    if shape == "box":
        return shapely.box(-100, -75, 100, 75)
    if shape == "cylinder":
        return shapely.Point(0, 0).buffer(150, quad_segs=2000)
    # Corners of a regular hexagon lie 60 degrees apart, at the circumradius.
    far = 130 / math.cos(math.pi / 6)
    corners = [math.pi / 2 + k * math.pi / 3 for k in range(6)]
    return shapely.Polygon([(far * math.cos(a), far * math.sin(a)) for a in corners])


@pytest.mark.parametrize("shape", SHAPES)
def test_area_is_that_of_the_outline(shape):
    area = make_volume(make_spec(SHAPES[shape], LAYERS)).area_um2
    # A circle of 8000 corners lacks 1e-7 of the circle's area.
    assert area == pytest.approx(outline(shape).area, rel=1.1e-7)


def test_hexagon_area_from_its_width():
    # Area of a regular hexagon of width d between flats: sqrt(3)/2 d^2.
    volume = make_volume(make_spec(HEXAGON, LAYERS))
    assert volume.area_um2 == pytest.approx(math.sqrt(3) / 2 * 260**2, rel=1e-14)


@pytest.mark.parametrize("shape", SHAPES)
def test_contains_what_the_outline_contains(shape):
    volume, rng = make_volume(make_spec(SHAPES[shape], LAYERS)), np.random.default_rng(3)
    points = rng.uniform([-170, -170, -50], [170, 170, 650], (5_000, 3))
    polygon = outline(shape)
    in_plane = shapely.contains_xy(polygon, points[:, 0], points[:, 1])
    expected = in_plane & (points[:, 2] >= 0) & (points[:, 2] <= 600)
    # The polygon of the circle departs from it by 12 nm at most: 150 (1 - cos(pi/8000)).
    edge = shapely.distance(polygon.exterior, shapely.points(points[:, :2])) < 1e-4
    assert edge.mean() < 1e-3
    assert (volume.contains(points) == expected)[~edge].all()


@pytest.mark.parametrize("shape", SHAPES)
def test_slab_volume_is_area_times_height_within_the_cortex(shape):
    volume = make_volume(make_spec(SHAPES[shape], LAYERS))
    assert volume.slab_volume_um3(480, 600) == pytest.approx(120 * volume.area_um2)
    assert volume.slab_volume_um3(-90, 30) == pytest.approx(30 * volume.area_um2)
    assert volume.slab_volume_um3(700, 800) == 0
    assert volume.slab_volume_um3(30, 10) == 0


@pytest.mark.parametrize("shape", SHAPES)
def test_box_around_a_slab_is_tight(shape):
    volume = make_volume(make_spec(SHAPES[shape], LAYERS))
    low, high = volume.slab_box_um(100, 250)
    bounds = outline(shape).bounds
    assert [*low[:2], *high[:2]] == pytest.approx(bounds, rel=1e-6)
    assert (low[2], high[2]) == (100, 250)
    assert np.array(volume.box_um)[:, 2].tolist() == [0, 600]


def test_only_a_wrapped_box_has_periods():
    assert make_volume(make_spec(BOX, LAYERS)).wrap_um == (0, 0)
    wrapped = make_volume(make_spec(BOX | {"edges": "wrap"}, LAYERS))
    assert wrapped.wrap_um == (200, 150)
