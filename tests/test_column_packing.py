"""Somata that do not overlap: the kernel against its twin, limits, even density."""

from __future__ import annotations

import numpy as np
import pytest
from builders import random_arbor
from builders_column import BOX, CYLINDER, cell_type, make_spec
from hypothesis import given, settings
from hypothesis import strategies as st
from oracles_column import smallest_clearance, take_in_turn
from scipy import stats

from circuitgen.column import kernels, make_volume, place_cells
from circuitgen.column.packing import Packing, Slab, _make_grid
from circuitgen.core.errors import InputError

WRAPPED = BOX | {"edges": "wrap"}


def arbors_for(spec, seed=1):
    rng = np.random.default_rng(seed)
    return [[random_arbor(rng) for _ in range(3)] for _ in spec.cell_types]


def place(column, layers, *types, seed=7):
    spec = make_spec(column, layers, *types, seed=seed)
    return place_cells(spec, arbors_for(spec))


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 2**32),
    wraps=st.tuples(st.booleans(), st.booleans()),
    sides=st.tuples(*[st.floats(20.0, 90.0)] * 3),
)
def test_kernel_takes_what_its_slow_twin_takes(seed, wraps, sides):
    rng = np.random.default_rng(seed)
    sides = np.array(sides)
    wrap_um = tuple(np.where(wraps, sides[:2], 0.0).tolist())
    radii = rng.uniform(2.0, 8.0, 4)
    grid = _make_grid(np.zeros(3), sides, 2 * radii.max(), wrap_um)
    places = kernels.Places(np.zeros((800, 3)), np.zeros(800), np.zeros(800, int))
    taken, places_n = [], 0
    for radius in radii:
        candidates = rng.uniform(0, sides, (200, 3))
        is_cell = rng.random(200) < 0.7
        chosen = np.zeros(200, np.int64)
        _, new = kernels.take_places(
            candidates, is_cell, radius, 10, places_n, grid, places, chosen
        )
        assert chosen[:new].tolist() == take_in_turn(
            candidates, is_cell, radius, 10, taken, wrap_um
        )
        places_n += new


@pytest.mark.parametrize("column", [CYLINDER, BOX, WRAPPED])
def test_somata_never_overlap(column):
    types = [
        cell_type(name, density={"L1": 20_000, "L2": 40_000}, radius_um=radius)
        for name, radius in (("a", 5.0), ("b", 8.0), ("c", 6.0))
    ]
    placement = place(column, {"L1": 100, "L2": 150}, *types)
    cells = placement.cells
    radius_um = np.array([5.0, 8.0, 6.0])[cells.type_index]
    wrap_um = placement.volume.wrap_um
    least = smallest_clearance(cells.position_um, radius_um, wrap_um)
    assert least >= 0
    # Dense enough that the rule mattered: somebody is within a micrometre.
    assert least < 1
    if any(wrap_um):
        # Without the copies across the edge the check would be weaker.
        x = cells.position_um[:, 0]
        assert x.min() < -95
        assert x.max() > 95


def test_cells_lie_in_their_layer_and_shape():
    placement = place(CYLINDER, {"L1": 90, "L2": 60}, cell_type("a", count={"L2": 400}))
    cells = placement.cells
    assert placement.volume.contains(cells.position_um).all()
    assert (cells.layer_index == 1).all()
    assert cells.position_um[:, 2].min() >= 0
    assert cells.position_um[:, 2].max() < 60


@pytest.mark.parametrize("column", [CYLINDER, WRAPPED])
def test_places_are_uniform_in_the_volume(column):
    """Somata of no size are a sample of the uniform law; false alarms 1 in 10,000."""
    point = cell_type("a", count={"L1": 12_000, "L2": 24_000}, radius_um=0.01)
    placement = place(column, {"L1": 100, "L2": 200}, point)
    x, y, z = placement.cells.position_um.T
    if column is CYLINDER:
        # Equal areas: rings of equal steps in r squared, sectors of equal angle.
        across = np.floor((x**2 + y**2) / 150**2 * 5)
        around = np.floor((np.arctan2(y, x) / (2 * np.pi) + 0.5) * 6)
    else:
        across, around = np.floor((x + 100) / 40), np.floor((y + 75) / 25)
    counts = np.histogramdd([across, around, z], [np.arange(6), np.arange(7), 15])[0]
    assert counts.sum() == 36_000
    assert stats.chisquare(counts.ravel()).pvalue > 1e-4


def test_density_is_even_up_to_the_edge():
    """At 90,000 per mm3, shells at every open edge hold their share of the cells.

    The number in a shell varies less than a binomial one, because somata keep apart:
    5 standard deviations each, five shells, false alarms below 1 in 300,000. Without
    the tissue that goes on beyond the edge both flat shells exceed it.
    """
    column = {"shape": "cylinder", "diameter_um": 515.0}
    dense = cell_type("a", density={"L1": 90_000, "L2": 90_000})
    shells = np.zeros(5)
    seeds = range(8)
    for seed in seeds:
        cells = place(column, {"L1": 800, "L2": 800}, dense, seed=seed).cells
        radius = np.hypot(cells.position_um[:, 0], cells.position_um[:, 1])
        z = cells.position_um[:, 2]
        shells += [
            np.count_nonzero(radius > 257.5 - 7),
            np.count_nonzero(z < 7),
            np.count_nonzero(z > 1600 - 7),
            np.count_nonzero((z >= 800) & (z < 807)),
            np.count_nonzero((z < 800) & (z > 793)),
        ]
    share = np.array([1 - (250.5 / 257.5) ** 2, *[7 / 1600] * 4])
    trials = len(seeds) * cells.cells_n
    expected = trials * share
    z_scores = (shells - expected) / np.sqrt(expected * (1 - share))
    assert np.abs(z_scores).max() < 5


def test_too_dense_a_layer_is_refused_at_once(tmp_path):
    file = tmp_path / "spec.yaml"
    file.write_text("name: x\nlayers:\n  - {name: L1}\n  - {name: L2}\n")
    # Two in five of the volume: 0.4 / (4/3 pi 7^3) per um3.
    types = (
        cell_type("small", density={"L1": 1000}, radius_um=4.0),
        cell_type("many", density={"L2": 0.4e9 / (4 / 3 * np.pi * 7**3)}),
    )
    spec = make_spec(BOX, {"L1": 100, "L2": 200}, *types, path=file)
    with pytest.raises(InputError) as caught:
        place_cells(spec, arbors_for(spec))
    (problem,) = caught.value.problems
    assert (problem.file, problem.line, problem.field) == (str(file), 4, "layers.2")
    assert "(L2) would be 40.0% soma" in problem.rule
    assert "most is many" in problem.rule


def test_density_near_the_limit_ends_with_an_error():
    crowd = cell_type("crowd", density={"L1": 0.38e9 / (4 / 3 * np.pi * 7**3)})
    with pytest.raises(InputError, match=r"cell_types.crowd finds no place for \d+ of"):
        place({"shape": "box", "width_um": 90.0, "length_um": 90.0}, {"L1": 90}, crowd)


def test_saturation_is_approached_from_below():
    """Somata added until few proposals succeed: near 0.384 and never above it.

    Saturation 0.38413 of random sequential addition of equal spheres: Zhang &
    Torquato 2013, Phys Rev E 88:053312 (from memory). The deficit shrinks as the
    cube root of the number of tries, so a few thousand tries reach 0.35 to 0.38.
    """
    side = 180.0
    box = {"shape": "box", "width_um": side, "length_um": side, "edges": "wrap"}
    volume = make_volume(make_spec(box, {"L1": side}, cell_type("a", count={"L1": 1})))
    soma_um3 = 4 / 3 * np.pi * 6.0**3
    (found,) = Packing(volume, 6.0).fill(
        [Slab(volume, 0.0, side)], [int(0.45 * side**3 / soma_um3)], 6.0, 3, ["test"]
    )
    assert 0.35 < len(found) * soma_um3 / side**3 < 0.384


def test_box_narrower_than_a_soma_is_refused():
    narrow = {"shape": "box", "width_um": 10.0, "length_um": 900.0, "edges": "wrap"}
    with pytest.raises(InputError, match="soma 14 um wide; the box is 10 um"):
        place(narrow, {"L1": 100}, cell_type("a", count={"L1": 5}))
