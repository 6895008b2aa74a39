"""Layers that are too full, reconstructions that fit their depth, periodic boxes."""

from __future__ import annotations

import numpy as np
import pytest
import trimesh
from oracles_column import apical_top, make_arbor, make_spec, make_type, outside_share
from scipy.stats import chisquare

from circuitgen.column import place_cells
from circuitgen.column.placement import FIT_SHARE, FIT_TOP_UM
from circuitgen.core.errors import InputError

FALSE_ALARM = 1e-4
SMALL_BOX = {"shape": "box", "width_um": 80.0, "length_um": 80.0, "edges": "wrap"}
ONE_LAYER = (("all", 400.0),)


def _problems(spec, arbors):
    with pytest.raises(InputError) as caught:
        place_cells(spec, arbors)
    return caught.value.problems


def test_layers_that_cannot_hold_their_somata_are_all_named():
    # A sphere of radius 5 has 524 um3; L1 has 640,000 um3, L2 1,920,000 um3.
    types = [
        make_type("one", radius=5.0, count={"L1": 500, "L2": 900}),
        make_type("two", radius=5.0, count={"L2": 900}),
    ]
    problems = _problems(make_spec(*types, **SMALL_BOX), [[make_arbor()]] * 2)
    assert [problem.field for problem in problems] == ["layers.L1", "layers.L2"]
    assert "500 somata" in problems[0].rule
    assert "41%" in problems[0].rule
    assert "1800 somata" in problems[1].rule
    assert "49%" in problems[1].rule


def test_somata_that_find_no_place_are_named_by_type_and_layer():
    """Small somata fill a layer at random; a large one then fits nowhere.

    Together they stay below the share at which a layer is refused beforehand.
    """
    types = [
        make_type("small", radius=5.0, count={"all": 1000}),
        make_type("large", radius=15.0, count={"all": 2}),
    ]
    spec = make_spec(*types, layers=ONE_LAYER, **SMALL_BOX)
    [problem] = _problems(spec, [[make_arbor()]] * 2)
    assert problem.field == "cell_types.large"
    assert "no free place for its somata in all" in problem.rule


def test_a_layer_outside_the_mesh_cannot_hold_cells(tmp_path):
    mesh = trimesh.creation.cylinder(radius=100.0, height=397.0)
    mesh.apply_translation([0, 0, 397.0 / 2])
    path = tmp_path / "short.ply"
    mesh.export(path)
    layers = (("film", 2.0), ("rest", 398.0))
    held = make_spec(make_type(count={"rest": 5}), layers=layers, mesh=path)
    assert place_cells(held, [[make_arbor()]]).cells.cells_n == 5
    spec = make_spec(make_type(count={"film": 5, "rest": 5}), layers=layers, mesh=path)
    [problem] = _problems(spec, [[make_arbor()]])
    assert problem.field == "layers.film"
    assert "does not lie inside" in problem.rule


def test_the_exclusion_radius_is_that_of_the_largest_reconstruction():
    wide = make_arbor()
    wide.end_radius_um.setflags(write=True)
    wide.end_radius_um[0] = 12.0
    spec = make_spec(make_type(radius=None, count={"L2": 60}), **SMALL_BOX)
    position = place_cells(spec, [[make_arbor(), wide]]).cells.position_um
    offset = position[:, None] - position[None]
    offset[..., :2] -= 80 * np.round(offset[..., :2] / 80)
    distance = np.linalg.norm(offset, axis=2)[~np.eye(60, dtype=bool)]
    assert 24.0 <= distance.min() < 26.0


LIBRARY = [
    make_arbor(40.0, 30.0),
    make_arbor(110.0, 30.0),
    make_arbor(240.0, 30.0),
    make_arbor(250.0, 60.0),
    make_arbor(380.0, 10.0),
    make_arbor(60.0, 300.0, apical=False),
]


def _deepest_fits(height, library):
    """Which reconstructions fit a soma at a height: the rule, arbor by arbor."""
    share = [outside_share(arbor, height, 400.0) for arbor in library]
    fits = [i for i, s in enumerate(share) if s <= min(share) + FIT_SHARE]
    top = max(apical_top(library[i]) for i in fits)
    if top > -np.inf:
        fits = [i for i in fits if apical_top(library[i]) >= top - FIT_TOP_UM]
    return fits, share


def test_each_cell_gets_a_reconstruction_that_fits_its_depth():
    spec = make_spec(
        make_type("first", count={"all": 20}),
        make_type("second", count={"all": 600}),
        layers=ONE_LAYER,
    )
    placed = place_cells(spec, [[make_arbor()], LIBRARY])
    cells = placed.cells
    mine = cells.type_index == 1
    assert (cells.arbor_index[~mine] == 0).all()
    used, shares = set(), []
    for height, arbor in zip(
        cells.position_um[mine, 2], cells.arbor_index[mine] - 1, strict=True
    ):
        fits, share = _deepest_fits(height, LIBRARY)
        assert arbor in fits
        used.add(int(arbor))
        shares.append(share[arbor])
    assert placed.outside_share[1] == pytest.approx(np.mean(shares), rel=1e-9)
    # Deep somata take the tall apical dendrites, shallow ones the short.
    assert used >= {0, 1, 2, 3, 4}


def test_reconstructions_that_fit_equally_well_are_used_equally_often():
    """Chi-square, fixed seed; false alarm 1e-4 had the seed been random."""
    same = [make_arbor(10.0, 10.0) for _ in range(5)]
    spec = make_spec(make_type(radius=0.1, count={"all": 4000}), layers=ONE_LAYER)
    chosen = place_cells(spec, [same]).cells.arbor_index
    seen = np.bincount(chosen, minlength=5)
    assert seen.size == 5
    assert chisquare(seen).pvalue > FALSE_ALARM


@pytest.mark.parametrize(
    ("edges", "side_um", "warned"),
    [("wrap", 81.0, True), ("wrap", 79.0, False), ("open", 500.0, False)],
)
def test_arbors_wider_than_a_periodic_box_are_named(edges, side_um, warned):
    types = (make_type("narrow", count={"L1": 1}), make_type("wide", count={"L1": 1}))
    spec = make_spec(*types, **(SMALL_BOX | {"width_um": 300.0, "edges": edges}))
    arbors = [[make_arbor()], [make_arbor(), make_arbor(side_um=side_um)]]
    warnings = place_cells(spec, arbors).warnings
    assert len(warnings) == warned
    if warned:
        assert warnings[0].startswith("wide: an arbor 81 um wide")
        assert "80 um" in warnings[0]
