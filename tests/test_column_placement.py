"""Numbers of cells, their order, reconstructions that suit the depth, what is said."""

from __future__ import annotations

import math
from dataclasses import fields

import numpy as np
import pytest
from builders import arbor_from_segments
from builders_column import (
    BOX,
    CYLINDER,
    HEXAGON,
    cell_type,
    make_spec,
    upright_arbor,
)
from scipy import stats

from circuitgen.column import make_volume, place_cells
from circuitgen.column.order import hilbert_index
from circuitgen.core.errors import InputError
from circuitgen.morphology.arbor import Kind

# Neurons per column of rat barrel cortex: Meyer et al. 2010, Cereb Cortex 20:2277.
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
# Invented, about as thick as in the rat; together with an area they give densities.
THICKNESS = {
    "L1": 157,
    "L2": 178,
    "L3": 353,
    "L4": 320,
    "L5A": 203,
    "L5B": 315,
    "L6A": 384,
    "L6B": 170,
}
STUMP = [upright_arbor(40.0, radius_um=5.0)]


def same_cells(first, second):
    return all(
        np.array_equal(getattr(first, field.name), getattr(second, field.name))
        for field in fields(first)
    )


@pytest.mark.parametrize("column", [CYLINDER, HEXAGON], ids=["cylinder", "hexagon"])
def test_densities_times_volumes_give_the_published_layer_counts(column):
    column = {key: 3 * v if key != "shape" else v for key, v in column.items()}
    area_um2 = (
        math.pi * 450**2 if column["shape"] == "cylinder" else math.sqrt(3) / 2 * 780**2
    )
    # Two significant decimals more than a count needs, as a careful author writes them.
    density = {
        layer: round(count / (area_um2 * THICKNESS[layer] * 1e-9), 2)
        for layer, count in MEYER.items()
    }
    spec = make_spec(column, THICKNESS, cell_type("all", density=density, radius_um=5.0))
    placement = place_cells(spec, [STUMP])
    assert placement.cells_n.tolist() == [list(MEYER.values())]
    assert np.bincount(placement.cells.layer_index).tolist() == list(MEYER.values())
    assert placement.cells.cells_n == 19_108


@pytest.mark.parametrize(
    ("per_mm3", "cells"), [(499.9, 0), (500.0, 1), (1499.9, 1), (2500.0, 3)]
)
def test_half_a_cell_is_rounded_up(per_mm3, cells):
    # 0.001 mm3 exactly.
    box = {"shape": "box", "width_um": 100.0, "length_um": 100.0}
    types = cell_type("a", density={"L1": per_mm3}), cell_type("b", count={"L1": 2})
    placement = place_cells(make_spec(box, {"L1": 100}, *types), [STUMP, STUMP])
    assert placement.cells_n[0, 0] == cells
    said = [text for text in placement.warnings if "a has no cell in L1" in text]
    assert len(said) == (cells == 0)


def test_no_cell_at_all_is_an_error():
    spec = make_spec(BOX, {"L1": 100}, cell_type("a", density={"L1": 0.01}))
    with pytest.raises(InputError, match="no cell at all"):
        place_cells(spec, [STUMP])


def test_same_seed_same_bytes_other_seed_other_cells():
    types = [cell_type(name, density={"L1": 30_000}) for name in "ab"]
    first, again = (
        place_cells(make_spec(BOX, {"L1": 200}, *types), [STUMP, STUMP]).cells
        for _ in range(2)
    )
    other = place_cells(make_spec(BOX, {"L1": 200}, *types, seed=8), [STUMP] * 2).cells
    assert same_cells(first, again)
    assert not np.isin(first.position_um, other.position_um).any()


def test_a_type_added_at_the_end_moves_no_cell():
    types = [cell_type(name, density={"L1": 20_000, "L2": 9_000}) for name in "ab"]
    wide = cell_type("wide", count={"L1": 20}, radius_um=12.0)
    layers = {"L1": 200, "L2": 120}
    before = place_cells(make_spec(CYLINDER, layers, *types), [STUMP] * 2).cells
    after = place_cells(make_spec(CYLINDER, layers, *types, wide), [STUMP] * 3).cells
    assert after.cells_n == before.cells_n + 20
    for field in fields(before):
        kept = getattr(after, field.name)[: before.cells_n]
        assert np.array_equal(kept, getattr(before, field.name)), field.name


def test_soma_radius_defaults_to_the_largest_reconstruction():
    arbors = [upright_arbor(40, radius_um=radius) for radius in (4.0, 9.0, 6.0)]
    types = cell_type("a", count={"L1": 300}, radius_um=None)
    placement = place_cells(make_spec(BOX, {"L1": 200}, types), [arbors])
    soma_um3 = 300 * 4 / 3 * math.pi * 9.0**3
    assert placement.soma_share[0] == pytest.approx(soma_um3 / (200 * 150 * 200))


def test_azimuths_are_uniform():
    """Kolmogorov-Smirnov, false alarms 1 in 10,000."""
    spec = make_spec(BOX, {"L1": 200}, cell_type("a", count={"L1": 3000}, radius_um=1.0))
    azimuth = place_cells(spec, [STUMP]).cells.azimuth_deg
    assert ((azimuth >= 0) & (azimuth < 360)).all()
    assert stats.kstest(azimuth / 360, "uniform").pvalue > 1e-4


def test_hilbert_curve_visits_every_tile_once_and_never_jumps():
    for bits in (1, 3, 6):
        side = 2**bits
        column, row = np.divmod(np.arange(side**2), side)
        index = hilbert_index(column, row, bits)
        assert np.sort(index).tolist() == list(range(side**2))
        order = np.argsort(index)
        steps = np.abs(np.diff(column[order])) + np.abs(np.diff(row[order]))
        assert (steps == 1).all()


def test_cells_are_sorted_by_type_and_neighbours_in_id_are_close():
    types = [cell_type(name, density={"L1": 15_000}) for name in "abc"]
    box = {"shape": "box", "width_um": 800.0, "length_um": 800.0}
    cells = place_cells(make_spec(box, {"L1": 100}, *types), [STUMP] * 3).cells
    assert (np.diff(cells.type_index) >= 0).all()
    for kind in range(3):
        place = cells.position_um[cells.type_index == kind][:, :2]
        # 64 cells at 1500 per mm2 of surface need 0.043 mm2: a square 207 um wide.
        widths = [np.ptp(place[at : at + 64], axis=0) for at in range(0, 900, 64)]
        assert np.median(widths) < 2 * 207


def placed_with(tops_um, *, thickness=1000, first_layer=120, **fields_of_type):
    """Place cells in a layer 600 to 900 um deep, arbors with these apical tops."""
    arbors = [upright_arbor(top, **fields_of_type) for top in tops_um]
    layers = {"L1": first_layer, "gap": 480, "L5": 300, "L6": thickness - 900}
    types = cell_type("a", count={"L5": 900}, radius_um=2.0)
    placement = place_cells(make_spec(BOX, layers, types), [arbors])
    depth = thickness - placement.cells.position_um[:, 2]
    return placement, depth, placement.cells.arbor_index


def test_tuft_of_every_depth_ends_below_the_pia_and_near_it():
    tops = np.array([590, 690, 790, 890])
    placement, depth, chosen = placed_with(tops)
    drop = depth - tops[chosen]
    assert drop.min() >= 0
    # The tops are 100 um apart, so the next higher one is above the pia or near it.
    assert drop.max() <= 100
    assert set(chosen) == {0, 1, 2, 3}
    assert placement.above_share.tolist() == [0]


def test_equally_good_reconstructions_are_equally_likely():
    """Chi-square of three equal choices; false alarms 1 in 10,000."""
    _, _, chosen = placed_with([560, 570, 580, 300])
    assert stats.chisquare(np.bincount(chosen, minlength=4)[:3]).pvalue > 1e-4
    assert not (chosen == 3).any()


def test_apical_dendrites_that_end_deep_are_chosen_alike():
    """Layer 6 cells whose apical dendrite ends in mid-cortex need no long one."""
    _, _, chosen = placed_with([100, 200, 300])
    assert stats.chisquare(np.bincount(chosen, minlength=3)).pvalue > 1e-4


def test_types_without_apical_dendrite_go_by_cable_alone():
    _, _, chosen = placed_with([500, 560, 590], kind=Kind.BASAL)
    assert stats.chisquare(np.bincount(chosen, minlength=3)).pvalue > 1e-4


def test_shares_outside_are_the_cable_outside():
    # Straight up 700, straight down 350 um: at depth d, 700 - d are above the pia and
    # 350 - (1000 - d) below the cortex, where these are positive.
    placement, depth, _ = placed_with([700], bottom_um=-350.0)
    above = np.maximum(700 - depth, 0).sum() / (1050 * depth.size)
    below = np.maximum(350 - (1000 - depth), 0).sum() / (1050 * depth.size)
    # A segment of at most 4.1 um counts as a whole: half of it at each end of a cable.
    assert placement.above_share[0] == pytest.approx(above, abs=2.05 / 1050)
    assert placement.below_share[0] == pytest.approx(below, abs=2.05 / 1050)
    assert placement.above_share[0] > 0.004
    (warning,) = placement.warnings
    assert "a has" in warning
    assert "below the cortex" in warning


def test_too_long_a_cell_falls_back_on_the_least_outside():
    _, depth, chosen = placed_with([1500, 1200, 1300])
    assert (chosen == 1).all()
    assert depth.max() < 1200


def test_arbor_wider_than_a_wrapped_box_warns():
    # An apical tip 150 um sideways, at 120, 90 um: the arbor is as wide.
    tip = arbor_from_segments(
        [[0, 0, 0], [0, 0, 0]],
        [[0, 0, 0], [120, 90, 5]],
        [Kind.SOMA, Kind.APICAL],
        name="broad",
    )
    types = cell_type("a", count={"middle": 10})
    layers = {"upper": 100, "middle": 100, "lower": 100}

    def warnings(**sides):
        spec = make_spec(BOX | sides, layers, types)
        return place_cells(spec, [[*STUMP, tip]]).warnings

    assert warnings(length_um=140.0) == ()
    assert warnings(edges="wrap", length_um=151.0) == ()
    (warning,) = warnings(edges="wrap", length_um=149.0)
    assert "broad is 150 um wide and the wrapped box 149 um" in warning


def test_mesh_without_part_in_a_layer(tmp_path):
    trimesh = pytest.importorskip("trimesh")
    mesh = trimesh.creation.box(extents=[200, 200, 100])
    mesh.apply_translation([0, 0, 50])
    file = tmp_path / "low.stl"
    mesh.export(file)
    column = {"shape": "mesh", "file": file}
    layers = {"L1": 50, "L2": 100}
    fine = cell_type("a", density={"L1": 9000, "L2": 9000})
    placement = place_cells(make_spec(column, layers, fine), [STUMP])
    # 200 x 200 x 100 um3 = 0.004 mm3 at 9000 per mm3.
    assert placement.cells_n.tolist() == [[0, 36]]
    assert (
        make_volume(make_spec(column, layers, fine))
        .contains(placement.cells.position_um)
        .all()
    )
    unplaceable = make_spec(column, layers, cell_type("b", count={"L1": 3}))
    with pytest.raises(InputError, match=r"cell_types.b.count.L1 wants cells, but"):
        place_cells(unplaceable, [STUMP])
