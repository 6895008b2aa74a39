"""A spec file: what it becomes, and every way in which it can be wrong."""

from __future__ import annotations

import os
import pickle
from dataclasses import FrozenInstanceError

import pytest
from builders_spec import (
    RECORDINGS,
    SPEC,
    edited,
    line_of,
    load,
    problems,
    write_spec,
)

from circuitgen.core.errors import InputError
from circuitgen.spec import load_spec


def test_good_spec(tmp_path):
    spec = load(tmp_path)
    assert (spec.name, spec.seed) == ("harbour-patch", 7)
    assert (spec.column.shape, spec.column.diameter_um) == ("cylinder", 300)
    assert spec.column.edges == "open"
    assert [(layer.name, layer.thickness_um) for layer in spec.layers] == [
        ("L1", 120),
        ("L23", 300),
    ]
    assert spec.thickness_um == 420
    assert spec.layer_bounds_um == ((300, 420), (0, 300))
    pyramidal, basket = spec.cell_types
    assert spec.type_names == ("L23_pyramidal", "L23_basket")
    assert (pyramidal.name, pyramidal.sign) == ("L23_pyramidal", "excitatory")
    assert (pyramidal.is_excitatory, basket.is_excitatory) == (True, False)
    assert (pyramidal.density_per_mm3, pyramidal.count) == ({"L23": 60000}, {})
    assert (basket.density_per_mm3, basket.count) == ({}, {"L1": 5, "L23": 40})
    assert pyramidal.morphologies == tuple(
        tmp_path / "arbors" / f"L23_pyramidal_{n}.swc" for n in (1, 2)
    )
    assert basket.morphologies == tuple(
        tmp_path / "arbors" / f"L23_basket_{n}.swc" for n in (1, 2)
    )
    assert (pyramidal.upright, pyramidal.soma_radius_um) == ("y", 7)
    assert (basket.upright, basket.soma_radius_um, basket.ais_um) == ("y", None, 30)
    assert pyramidal.targets == basket.targets == ("soma", "basal", "apical")
    assert spec.groups == {"L23_all": ("L23_pyramidal", "L23_basket")}
    assert spec.appositions.max_gap_um == 0.5
    assert spec.appositions.min_spacing_um == 4
    assert spec.appositions.autapses is False
    assert spec.conduction.axon_um_per_ms == 300
    assert spec.conduction.synaptic_delay_ms == 0.5
    assert len(spec.recordings) == 2
    assert spec.path == tmp_path / "spec.yaml"
    assert spec.text == SPEC
    assert spec.input_files == tuple(
        sorted(
            [
                *pyramidal.morphologies,
                *basket.morphologies,
                tmp_path / "recordings.csv",
            ]
        )
    )


def test_members(tmp_path):
    spec = load(tmp_path)
    assert spec.members("L23_basket") == (1,)
    assert spec.members("L23_all") == (0, 1)
    with pytest.raises(KeyError):
        spec.members("L23_al")


def test_a_spec_is_frozen_and_can_be_sent_to_workers(tmp_path):
    spec = load(tmp_path)
    with pytest.raises(FrozenInstanceError):
        spec.seed = 8
    with pytest.raises(ValueError, match="frozen"):
        spec.cell_types[0].sign = "inhibitory"
    with pytest.raises(ValueError, match="frozen"):
        spec.recordings[0].tested_n = 8
    assert pickle.loads(pickle.dumps(spec)) == spec


def test_only_the_required_keys(tmp_path):
    text = SPEC[: SPEC.index("groups:")]
    for passage in ("  edges: open\n", "    soma_radius_um: 7\n", "    upright: y\n"):
        text = edited(text, passage, "")
    spec = load(tmp_path, text)
    assert spec.column.edges == "open"
    assert spec.cell_types[0].soma_radius_um is None
    assert spec.cell_types[0].ais_um == 40
    assert (spec.groups, spec.recordings) == ({}, ())
    assert (spec.appositions.max_gap_um, spec.appositions.min_spacing_um) == (0.5, 4)
    assert spec.conduction.axon_um_per_ms == 300


@pytest.mark.parametrize(
    "passage", ["  L23_all: [L23_pyramidal, L23_basket]\n", " recordings.csv"]
)
def test_a_key_without_a_value_counts_as_absent(tmp_path, passage):
    recordings = edited(RECORDINGS, "L23_all", "L23_basket")
    spec = load(tmp_path, edited(SPEC, passage, ""), recordings)
    assert spec.groups == {} or spec.recordings == ()


@pytest.mark.parametrize(
    ("shape", "attributes"),
    [
        ("{shape: hexagon, across_flats_um: 80}", {"across_flats_um": 80}),
        (
            "{shape: box, width_um: 80, length_um: 90, edges: wrap}",
            {"width_um": 80, "length_um": 90, "edges": "wrap"},
        ),
    ],
)
def test_shapes(tmp_path, shape, attributes):
    column = load(tmp_path, with_column(shape)).column
    for name, value in attributes.items():
        assert getattr(column, name) == value
    assert column.diameter_um is None


def with_column(shape: str) -> str:
    passage = "column:\n  shape: cylinder\n  diameter_um: 300\n  edges: open\n"
    return edited(SPEC, passage, f"column: {shape}\n")


def test_mesh(tmp_path):
    (tmp_path / "piece.STL").touch()
    spec = load(tmp_path, with_column("{shape: mesh, file: piece.STL}"))
    assert spec.column.file == tmp_path / "piece.STL"
    assert spec.column.file in spec.input_files


def test_mesh_that_is_absent(tmp_path):
    (tmp_path / "piece.stl").touch()
    (problem,) = problems(tmp_path, with_column("{shape: mesh, file: peice.stl}"))
    assert (problem.line, problem.field) == (3, "column.file")
    assert problem.nearest == "piece.stl"
    assert str(tmp_path) in problem.rule


def test_mesh_of_another_kind(tmp_path):
    (tmp_path / "piece.dxf").touch()
    (problem,) = problems(tmp_path, with_column("{shape: mesh, file: piece.dxf}"))
    assert (problem.line, problem.field) == (3, "column.file")
    assert ".stl, .obj, .ply, .glb" in problem.rule


@pytest.mark.parametrize(
    ("shape", "faults"),
    [
        ("{shape: cylinder}", [("diameter_um", "is missing; shape cylinder needs it")]),
        (
            "{shape: cylinder, width_um: 3}",
            [
                ("diameter_um", "is missing; shape cylinder needs it"),
                ("width_um", "does not belong to shape cylinder"),
            ],
        ),
        (
            "{shape: box, width_um: 3, edges: wrap}",
            [("length_um", "is missing; shape box needs it")],
        ),
        (
            "{shape: hexagon, across_flats_um: 3, edges: wrap}",
            [("edges", "= 'wrap' needs shape box, not hexagon")],
        ),
        (
            "{shape: mesh, diameter_um: -3, file: }",
            [
                ("file", "is missing; shape mesh needs it"),
                ("diameter_um", "does not belong to shape mesh"),
                ("diameter_um", "= -3 must be > 0"),
            ],
        ),
        (
            "{shape: cilinder, diameter_um: 3}",
            [("shape", "= 'cilinder' must be one of cylinder, hexagon, box, mesh")],
        ),
        ("{shape: [box]}", [("shape", "must be one of cylinder")]),
        (
            "{shape: cylinder, diameter_um: 3, edges: wrapped}",
            [("edges", "= 'wrapped' must be one of open, wrap")],
        ),
        ("cylinder", [("", "= 'cylinder' must be 'key: value' lines")]),
    ],
)
def test_shapes_that_are_wrong(tmp_path, shape, faults):
    found = problems(tmp_path, with_column(shape))
    assert {problem.line for problem in found} == {3}
    assert len(found) == len(faults)
    for field, rule in faults:
        field = ".".join(filter(None, ["column", field]))
        assert any(field == one.field and rule in one.rule for one in found), found


@pytest.mark.parametrize("key", ["name", "seed", "column", "layers", "cell_types"])
@pytest.mark.parametrize("blank", [False, True])
def test_missing_parts(tmp_path, key, blank):
    lines = SPEC.splitlines(keepends=True)
    begin = next(i for i, line in enumerate(lines) if line.startswith(f"{key}:"))
    end = begin + 1
    while lines[end].startswith(" "):
        end += 1
    kept = [*lines[:begin], *([f"{key}:\n"] if blank else []), *lines[end:]]
    found = problems(tmp_path, "".join(kept))
    (problem,) = (one for one in found if one.field == key)
    assert problem.rule == "is missing"
    assert problem.line == (begin + 1 if blank else 1)
    # The rest of the spec is not blamed for it.
    assert all(one.field in (key, "") for one in found)


@pytest.mark.parametrize(
    "pattern",
    [
        "arbors/*.txt",
        "",
        ".",
        "arbors",
        "/",
        "**",
        "arbors/[",
        '"arbors/\\0.swc"',
        "x" * 5000,
        "x" * 300 + "/cell.swc",
        "../" * 100 + "none.swc",
    ],
)
def test_patterns_that_find_nothing(tmp_path, pattern):
    text = edited(SPEC, "arbors/L23_pyramidal_*.swc", pattern or "''")
    if pattern == "**":
        text = edited(text, "**", "'arbors/**/'")
    found = problems(tmp_path, text)
    assert len(found) == 1, found
    assert found[0].field == "cell_types.L23_pyramidal.morphologies"
    assert found[0].line == line_of(text, "sign: excitatory") + 2
    assert "finds no file" in found[0].rule
    assert len(found[0].rule) < 9000


def test_pattern_problem_names_folder_and_nearest_file(tmp_path):
    text = edited(SPEC, "arbors/L23_pyramidal_*.swc", "arbors/L23_pyramid_1.swc")
    (problem,) = problems(tmp_path, text)
    assert f"in the folder {tmp_path / 'arbors'}" in problem.rule
    assert problem.nearest == "arbors/L23_pyramidal_1.swc"


def test_absolute_and_recursive_patterns(tmp_path):
    text = edited(SPEC, "arbors/L23_pyramidal_*.swc", f"{tmp_path}/**/*_1.swc")
    files = load(tmp_path, text).cell_types[0].morphologies
    # A hidden file is not found by a star.
    assert [file.name for file in files] == ["L23_basket_1.swc", "L23_pyramidal_1.swc"]


def test_a_file_named_like_a_pattern_is_found_by_its_name(tmp_path):
    (tmp_path / "cell[1].swc").touch()
    text = edited(SPEC, "arbors/L23_pyramidal_*.swc", '"cell[1].swc"')
    files = load(tmp_path, text).cell_types[0].morphologies
    assert [file.name for file in files] == ["cell[1].swc"]


def test_links_keep_their_own_name(tmp_path):
    write_spec(tmp_path)
    store = tmp_path / "store"
    store.mkdir()
    (store / "8a1f").touch()
    (tmp_path / "arbors" / "L23_pyramidal_3.swc").symlink_to(store / "8a1f")
    files = load_spec(tmp_path / "spec.yaml").cell_types[0].morphologies
    assert [file.name for file in files] == [f"L23_pyramidal_{n}.swc" for n in (1, 2, 3)]


def test_paths_count_from_the_spec_whatever_the_working_folder(tmp_path, monkeypatch):
    home = tmp_path / "deep" / "home"
    text = edited(SPEC, "arbors/L23_pyramidal_*.swc", "../../far/L23_pyramidal_*.swc")
    write_spec(home, text)
    (tmp_path / "far").mkdir()
    (tmp_path / "far" / "L23_pyramidal_9.swc").touch()
    whole = load_spec(home / "spec.yaml")
    for folder in (tmp_path, home, tmp_path / "far"):
        monkeypatch.chdir(folder)
        spec = load_spec(os.path.relpath(home / "spec.yaml"))
        assert spec.cell_types == whole.cell_types
        assert (spec.path, spec.input_files) == (whole.path, whole.input_files)
        assert [one.tested_n for one in spec.recordings] == [50, 30]
    assert whole.cell_types[0].morphologies == (tmp_path / "far/L23_pyramidal_9.swc",)


def test_problems_name_files_as_the_user_did(tmp_path, monkeypatch):
    write_spec(
        tmp_path / "home",
        edited(SPEC, "seed: 7", "seed: x"),
        edited(RECORDINGS, "50,4", "50,z"),
    )
    monkeypatch.chdir(tmp_path)
    with pytest.raises(InputError) as caught:
        load_spec("home/spec.yaml")
    assert str(caught.value) == (
        "home/recordings.csv:2: connected_n = 'z' must be a whole number\n"
        "home/spec.yaml:2: seed = 'x' must be a whole number"
    )


def test_spec_and_recordings_are_reported_together_in_order(tmp_path):
    text = SPEC
    for old, new in (
        ("seed: 7", "seed: x"),
        ("thickness_um: 300", "thickness_um: -300"),
        ("sign: inhibitory", "sign: inhib"),
        ("L1: 5", "L4: 5"),
        ("[L23_pyramidal, L23_basket]", "[L23_pyramidal, basket]"),
        ("max_gap_um", "max_gap_nm"),
        ("arbors/L23_basket_1.swc", "arbors/none.swc"),
    ):
        text = edited(text, old, new)
    recordings = edited(RECORDINGS, "50,4", "50,51") + "x,L23_pyr,L23_al,1,1,9,2,fit\n"
    found = problems(tmp_path, text, recordings)
    table, spec = str(tmp_path / "recordings.csv"), str(tmp_path / "spec.yaml")
    places = [(one.file, one.line, one.field) for one in found]
    assert places == [
        (table, 2, "connected_n"),
        (table, 4, "distance_low_um"),
        (table, 4, "pre_type"),
        (table, 4, "post_type"),
        (spec, 2, "seed"),
        (spec, 10, "layers.2.thickness_um"),
        (spec, 20, "cell_types.L23_basket.sign"),
        (spec, 22, "cell_types.L23_basket.count.L4"),
        (spec, 24, "cell_types.L23_basket.morphologies.1"),
        (spec, 27, "groups.L23_all.2"),
        (spec, 28, "appositions.max_gap_nm"),
    ]
    assert found[2].nearest == "L23_pyramidal"
    assert found[3].nearest == "L23_all"


def test_a_list_whose_only_entry_is_wrong_is_not_called_empty(tmp_path):
    text = edited(SPEC, "  - name: L23\n    thickness_um: 300\n", "")
    text = edited(text, "thickness_um: 120", "thickness_um: 0")
    text = edited(text, "{L23: 60000}", "{L1: -1}")
    text = edited(text, "      L23: 40\n", "")
    text = edited(text, "[soma, basal, apical]", "[spine]")
    assert [one.field for one in problems(tmp_path, text)] == [
        "layers.1.thickness_um",
        "cell_types.L23_pyramidal.density_per_mm3.L1",
        "cell_types.L23_pyramidal.targets.1",
    ]


def test_a_wrong_type_is_not_blamed_twice(tmp_path):
    text = edited(SPEC, "sign: excitatory", "sign: 3")
    assert len(problems(tmp_path, text)) == 1
