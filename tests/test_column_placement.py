"""Cells in place: how many, how spread, how far apart, which reconstruction.

The chi-square tests run once on a fixed seed; each rejects a right program with
probability 1e-4 had the seed been random.
"""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
import trimesh
from oracles_column import make_arbor, make_spec, make_type
from scipy.spatial.distance import cdist
from scipy.stats import chisquare

from circuitgen.column import make_volume, place_cells
from circuitgen.column.placement import cell_counts

FALSE_ALARM = 1e-4
BOX = {"shape": "box", "width_um": 100.0, "length_um": 80.0}

# Meyer et al. 2010 (Cereb Cortex 20:2277), rat barrel column, neurons by layer.
MEYER = {
    "L1": 63,
    "L2": 2039,
    "L3": 3735,
    "L4": 4447,
    "L5A": 1737,
    "L5B": 2235,
    "L6A": 3786,
    "L6B": 1066,
}


@pytest.mark.parametrize(
    "column",
    [
        {"shape": "cylinder", "diameter_um": 395.0},
        {"shape": "hexagon", "across_flats_um": 410.0},
        {"shape": "box", "width_um": 350.0, "length_um": 345.0},
    ],
)
def test_published_layer_counts_come_back_from_their_densities(column):
    """The thicknesses are made up: counts, areas and densities must agree at any."""
    thickness = dict(zip(MEYER, (130, 150, 280, 330, 180, 300, 400, 140), strict=True))
    area = {
        "cylinder": np.pi * 197.5**2,
        "hexagon": 2 * np.sqrt(3) * 205.0**2,
        "box": 350.0 * 345.0,
    }[column["shape"]]
    density = {name: n / (area * thickness[name] * 1e-9) for name, n in MEYER.items()}
    spec = make_spec(
        make_type(density=density),
        layers=tuple((name, float(um)) for name, um in thickness.items()),
        **column,
    )
    counts = cell_counts(spec, make_volume(spec))
    assert counts.tolist() == [list(MEYER.values())]
    # Their sum; the paper prints 19,109 +- 444.
    assert counts.sum() == 19_108


def test_the_published_density_of_somata_fills_the_published_volume():
    """Meyer et al. 2010: 89,834 somata in 1.15 mm3, 78,100 per mm3 as printed."""
    spec = make_spec(
        make_type(density={"all": 78_100.0}),
        layers=(("all", 1150.0),),
        shape="box",
        width_um=1000.0,
        length_um=1000.0,
    )
    # The printed density is rounded to hundreds: +- 50 per mm3 is +- 58 somata.
    assert cell_counts(spec, make_volume(spec)).sum() == pytest.approx(89_834, abs=58)


@pytest.mark.parametrize(
    ("density", "count"), [(0.0, 0), (4999.9, 0), (5000.0, 1), (14_999.9, 1)]
)
def test_counts_are_rounded_halves_up(density, count):
    # A layer of 100 * 10 * 100 um3 = 1e-4 mm3.
    column = {"shape": "box", "width_um": 100.0, "length_um": 10.0}
    spec = make_spec(make_type(density={"L1": density}), **column)
    assert cell_counts(spec, make_volume(spec)).tolist() == [[count, 0]]


def test_counts_stand_as_they_are_and_cells_lie_in_their_layers():
    spec = make_spec(
        make_type("one", count={"L1": 30}), make_type("two", count={"L1": 5, "L2": 40})
    )
    placed = place_cells(spec, [[make_arbor()], [make_arbor()]])
    assert placed.counts.tolist() == [[30, 0], [5, 40]]
    cells = placed.cells
    assert cells.cells_n == 75
    assert (np.diff(cells.type_index) >= 0).all()
    for row in range(2):
        for layer, (low, high) in enumerate(((300.0, 400.0), (0.0, 300.0))):
            mine = (cells.type_index == row) & (cells.layer_index == layer)
            assert mine.sum() == placed.counts[row, layer]
            z = cells.position_um[mine, 2]
            assert ((z >= low) & (z <= high)).all()
    assert make_volume(spec).contains(cells.position_um).all()


def _uniform_bins(shape, points):
    """Number of the bin of equal volume that holds each point; and how many bins."""
    x, y, z = points.T
    height = np.minimum((z / 400 * 4).astype(int), 3)
    if shape == "box":
        across = np.minimum(((x / 100 + 0.5) * 5).astype(int), 4)
        along = np.minimum(((y / 80 + 0.5) * 4).astype(int), 3)
        return (across * 4 + along) * 4 + height, 80
    # Six equal sectors, centred on the flats of the hexagon and of the hexagonal mesh.
    sector = ((np.arctan2(y, x) / (np.pi / 3) + 6.5) % 6).astype(int)
    folded = np.arctan2(y, x) - (sector - 6 * (sector > 3)) * np.pi / 3
    reach = np.hypot(x, y)
    if shape != "cylinder":
        reach = reach * np.cos(folded)
    ring = np.minimum(((reach / 100) ** 2 * 3).astype(int), 2)
    return (sector * 3 + ring) * 4 + height, 72


@pytest.mark.parametrize("shape", ["cylinder", "hexagon", "box", "mesh"])
def test_cells_are_uniform_in_the_volume(shape, tmp_path):
    column, mesh = {
        "cylinder": ({"shape": "cylinder", "diameter_um": 200.0}, None),
        "hexagon": ({"shape": "hexagon", "across_flats_um": 200.0}, None),
        "box": (BOX, None),
        "mesh": ({}, tmp_path / "hexagon.ply"),
    }[shape]
    if mesh:
        body = trimesh.creation.cylinder(
            radius=200 / np.sqrt(3), height=400.0, sections=6
        )
        body.apply_transform(
            trimesh.transformations.rotation_matrix(np.pi / 6, [0, 0, 1])
        )
        body.apply_translation([0, 0, 200.0])
        body.export(mesh)
    n = 6000
    spec = make_spec(
        make_type(radius=0.1, count={"all": n}),
        layers=(("all", 400.0),),
        mesh=mesh,
        **column,
    )
    cells = place_cells(spec, [[make_arbor()]]).cells
    bins, bins_n = _uniform_bins(shape, cells.position_um)
    seen = np.bincount(bins, minlength=bins_n)
    assert seen.size == bins_n
    assert chisquare(seen).pvalue > FALSE_ALARM
    turns = np.bincount((cells.azimuth_deg / 30).astype(int), minlength=12)
    assert turns.size == 12
    assert chisquare(turns).pvalue > FALSE_ALARM


def _least_free_gap(cells, radii, wrap_um):
    """Least distance of two surfaces, by every pair and every periodic copy."""
    position, radius = cells.position_um, radii[cells.type_index]
    least = np.inf
    for dx in (-1, 0, 1):
        for dy in (-1, 0, 1):
            shift = np.array([dx * wrap_um[0], dy * wrap_um[1], 0.0])
            distance = cdist(position, position + shift)
            if not shift.any():
                np.fill_diagonal(distance, np.inf)
            least = min(least, (distance - radius - radius[:, None]).min())
    return least


@pytest.mark.parametrize("width", [100.0, 30.0])
@pytest.mark.parametrize("edges", ["open", "wrap"])
def test_somata_never_overlap_not_even_around_the_box(edges, width):
    types = (
        make_type("large", radius=9.0, count={"L2": round(width / 5)}),
        make_type("small", radius=4.0, count={"L1": 20, "L2": round(2 * width)}),
    )
    column = {"shape": "box", "width_um": width, "length_um": 80.0, "edges": edges}
    spec = make_spec(*types, **column)
    cells = place_cells(spec, [[make_arbor()], [make_arbor()]]).cells
    radii = np.array([9.0, 4.0])
    assert _least_free_gap(cells, radii, (1e4, 1e4)) >= 0
    around = _least_free_gap(cells, radii, (width, 80.0))
    # Open edges must overlap around the box, or the check above would check nothing.
    assert (around >= 0) == (edges == "wrap")


def _arrays(cells):
    return [getattr(cells, field.name) for field in dataclasses.fields(cells)]


def test_the_same_spec_gives_the_same_bytes_and_another_seed_other_cells():
    types = (make_type("one", radius=5.0, count={"L1": 40, "L2": 80}),)
    arbors = [[make_arbor(), make_arbor(30.0)]]
    first, again = (place_cells(make_spec(*types, **BOX), arbors) for _ in range(2))
    for a, b in zip(_arrays(first.cells), _arrays(again.cells), strict=True):
        assert a.tobytes() == b.tobytes()
    other = place_cells(make_spec(*types, seed=4, **BOX), arbors)
    assert not np.isin(other.cells.position_um, first.cells.position_um).any()


@pytest.mark.parametrize("seed", range(5))
def test_a_type_added_at_the_end_moves_no_earlier_cell(seed):
    types = [
        make_type("one", radius=5.0, count={"L1": 40, "L2": 80}),
        make_type("two", radius=3.0, count={"L2": 60}),
        make_type("three", radius=8.0, count={"L1": 10, "L2": 10}),
    ]
    arbors = [[make_arbor(), make_arbor(30.0)], [make_arbor()], [make_arbor()]]
    column = {"shape": "cylinder", "diameter_um": 500.0, "seed": seed}
    whole = place_cells(make_spec(*types, **column), arbors).cells
    for n in (1, 2):
        part = place_cells(make_spec(*types[:n], **column), arbors[:n]).cells
        for a, b in zip(_arrays(part), _arrays(whole), strict=True):
            np.testing.assert_array_equal(a, b[: part.cells_n])


def test_consecutive_cells_are_near_each_other():
    spec = make_spec(
        make_type(radius=0.1, count={"L2": 4000}), shape="cylinder", diameter_um=800.0
    )
    position = place_cells(spec, [[make_arbor()]]).cells.position_um[:, :2]
    blocks = [np.ptp(position[i : i + 40], axis=0).max() for i in range(0, 4000, 40)]
    # Tiles are 100 um wide and hold 80 cells here; random order would span 700 um.
    assert np.median(blocks) <= 200


def test_no_cells_at_all_are_fine():
    spec = make_spec(make_type(density={"L1": 0.0}))
    placed = place_cells(spec, [[make_arbor()]])
    assert placed.cells.cells_n == 0
    assert placed.outside_share.tolist() == [0.0]
