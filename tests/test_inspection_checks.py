"""Findings on spoilt reconstructions, and none that block use on healthy ones."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
from builders_inspection import (
    REAL_UNIT_UM,
    STAND_INS,
    codes,
    cut,
    inspected,
    real_files,
    scaled,
    stand_in,
    turned,
)
from builders_morphology import read_table

import circuitgen.morphology
from circuitgen.inspection import inspect_file
from circuitgen.inspection.remarks import READER

ROUND = "L23_basket_1"
LONG = ("L5_thick_1", "L23_pyramidal_3", "L6_pyramidal_2")


@pytest.mark.parametrize("path", STAND_INS, ids=lambda path: path.stem)
def test_nothing_blocks_or_warns_of_a_stand_in(path):
    assert codes(inspect_file(path), "blocks", "warning", "repair") == set()


def test_there_are_enough_healthy_files():
    assert len(STAND_INS) >= 10
    assert len(real_files()) == 5


@pytest.mark.parametrize("path", real_files(), ids=lambda path: path.stem)
def test_real_neurons_have_only_what_is_true_of_them(tmp_path, path):
    """In micrometres nothing blocks; axon, soma and pieces are as the files are."""
    table = scaled(read_table(path), *(REAL_UNIT_UM,) * 4)
    sheet = inspected(tmp_path, table)
    assert sheet.usable
    # Counted from the rows themselves: no sample has type 2; some file has no type 1.
    assert not (table[:, 1] == 2).any()
    true = {"no_axon", "loose_dropped"}
    if not (table[:, 1] == 1).any():
        true.add("soma_made")
    assert codes(sheet, "blocks", "warning") <= true


@pytest.mark.parametrize("path", real_files(), ids=lambda path: path.stem)
def test_real_neurons_in_their_unit_of_8_nm_are_called_so(path):
    assert codes(inspect_file(path), "blocks") == {"units_large"}


@pytest.mark.parametrize("on_plane", [True, False])
@pytest.mark.parametrize("normal", [(0, 0, 1), (-1, 0, 0), (0.7, 0.1, -0.7)])
@pytest.mark.parametrize("name", ["L5_slender_2", "L23_basket_1", "L4_stellate_1"])
def test_a_slice_face_is_found_at_its_place(tmp_path, name, normal, on_plane):
    sheet = inspected(tmp_path, cut(stand_in(name), normal, 40.0, on_plane=on_plane))
    [face] = [r for r in sheet.remarks if r.code == "cut_face"]
    assert face.severity == "warning"
    distance = float(re.search(r"one plane, (\d+) um", face.seen)[1])
    assert abs(distance - 40.0) <= 4.0


@pytest.mark.parametrize("distance_um", [60.0, 90.0, 120.0])
def test_a_face_farther_out_is_found_while_many_branches_cross_it(tmp_path, distance_um):
    sheet = inspected(tmp_path, cut(stand_in(ROUND), (0, 0, 1), distance_um))
    assert "cut_face" in codes(sheet, "warning")


def test_branches_that_end_below_the_pia_are_a_note(tmp_path):
    sheet = inspected(tmp_path, cut(stand_in(ROUND), (0, 1, 0), 50.0))
    assert "cut_face" in codes(sheet, "note")


@pytest.mark.parametrize("axis", ["x", "z"])
@pytest.mark.parametrize("path", STAND_INS[::4], ids=lambda path: path.stem)
def test_shrinkage_across_is_found(tmp_path, path, axis):
    sheet = inspected(tmp_path, scaled(read_table(path), **{axis: 0.7}))
    assert "shrunk_across" in codes(sheet, "warning")
    [seen] = [r.seen for r in sheet.remarks if r.code == "shrunk_across"]
    assert f"along {axis} only" in seen


@pytest.mark.parametrize("name", [ROUND, "L6_inverted_1", "L1_dense_1"])
@pytest.mark.parametrize("factor", [0.5, 0.6])
def test_stronger_shrinkage_is_found(tmp_path, factor, name):
    for axis in "xyz":
        sheet = inspected(tmp_path, scaled(stand_in(name), **{axis: factor}))
        assert codes(sheet, "warning") & {"shrunk_across", "shrunk_upright"}, axis


def test_shrinkage_along_the_upright_axis_is_mostly_found(tmp_path):
    """Seen from bends alone: at least 8 of 10 stand-ins, and every real neuron."""
    found = [
        "shrunk_upright"
        in codes(inspected(tmp_path, scaled(read_table(path), y=0.7)), "warning")
        for path in STAND_INS
    ]
    assert np.mean(found) >= 0.8
    for path in real_files():
        table = scaled(read_table(path), *(REAL_UNIT_UM,) * 4)
        assert "shrunk_upright" in codes(
            inspected(tmp_path, scaled(table, y=0.7)), "warning"
        )


@pytest.mark.parametrize("factor", [1000.0, 125.0])
def test_nanometres_and_voxels_are_found(tmp_path, factor):
    sheet = inspected(tmp_path, scaled(stand_in("L5_thick_1"), *(factor,) * 4))
    assert not sheet.usable
    [remark] = [r for r in sheet.remarks if r.severity == "blocks"]
    assert "units" in remark.code or "are the units micrometres?" in remark.seen


def test_millimetres_are_found(tmp_path):
    sheet = inspected(tmp_path, scaled(stand_in("L5_thick_1"), *(0.001,) * 4))
    assert "units_small" in codes(sheet, "blocks")


def test_a_soma_of_tenfold_size_is_found(tmp_path):
    sheet = inspected(tmp_path, scaled(stand_in("L5_thick_1"), *(10,) * 4))
    assert "soma_size" in codes(sheet, "warning")


@pytest.mark.parametrize("name", LONG)
@pytest.mark.parametrize(
    ("order", "signs", "likely"),
    [((1, 0, 2), (1, -1, 1), "x"), ((0, 2, 1), (1, -1, -1), "-z")],
)
def test_a_pyramid_turned_by_90_degrees_is_found(tmp_path, name, order, signs, likely):
    table = turned(stand_in(name), order, signs)
    sheet = inspected(tmp_path, table)
    assert codes(sheet, "blocks") == {"upright_apical"}
    [remark] = [r for r in sheet.remarks if r.severity == "blocks"]
    assert f"upright: {likely} " in remark.remedy
    assert inspected(tmp_path, table, likely).usable


@pytest.mark.parametrize("name", ["L23_bitufted_1", "L1_dense_2", "L4_stellate_2"])
def test_an_interneuron_turned_by_90_degrees_is_warned_of(tmp_path, name):
    sheet = inspected(tmp_path, turned(stand_in(name), (1, 0, 2), (1, -1, 1)))
    assert "upright_shape" in codes(sheet, "warning")
    assert sheet.usable


@pytest.mark.parametrize(
    ("z", "severity", "code"), [(0.0, "blocks", "flat"), (0.05, "warning", "thin")]
)
def test_flat_arbors_are_found(tmp_path, z, severity, code):
    sheet = inspected(tmp_path, scaled(stand_in("L4_stellate_1"), z=z))
    assert code in codes(sheet, severity)
    assert "cut_face" not in codes(sheet, "warning")


def test_a_short_axon_is_found(tmp_path):
    table = stand_in("L5_thick_1")
    reach = np.linalg.norm(table[:, 2:5], axis=1)
    short = table[(table[:, 1] != 2) | (reach < 120)]
    whole = np.isin(short[:, 6], short[:, 0]) | (short[:, 6] == -1)
    short[~whole, 6] = -1
    assert "axon_short" in codes(inspected(tmp_path, short), "warning")
    none = table[table[:, 1] != 2]
    assert "no_axon" in codes(inspected(tmp_path, none), "warning")


def test_filled_in_radii_are_found(tmp_path):
    table = stand_in("L5_thick_1")
    table[table[:, 1] != 1, 5] = 0.5
    assert "radii_equal" in codes(inspected(tmp_path, table), "warning")
    table[40:80, 5] = 0.7
    assert "radii_default" in codes(inspected(tmp_path, table), "warning")


def test_a_missing_soma_and_a_lone_soma_are_found(tmp_path):
    table = stand_in("L5_thick_1")
    assert not inspected(tmp_path, table[:1]).usable
    table[0, 1] = 3
    assert "soma_made" in codes(inspected(tmp_path, table), "warning")


def test_floating_pieces_are_found(tmp_path):
    table = stand_in("L5_thick_1")
    table[2000, 6] = -1
    assert "loose_kept" in codes(inspected(tmp_path, table), "repair")


def test_every_finding_of_the_reader_has_its_words():
    folder = Path(circuitgen.morphology.__file__).parent
    text = "".join(path.read_text("utf-8") for path in folder.glob("*.py"))
    named = set(re.findall(r'findings\.(?:warn|repair)\(\s*"(\w+)"', text))
    assert len(named) > 15
    assert named == set(READER)
