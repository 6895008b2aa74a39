"""From a reconstruction to capsules: frame, sampling, cuts, initial segment, places."""

from pathlib import Path

import numpy as np
import pytest
from builders_morphology import (
    arbor_of,
    halved,
    made_up_tree,
    read_table,
    renumbered,
    resampled,
    write_table,
)

from circuitgen.morphology import Kind

STAND_INS = sorted((Path(__file__).parents[1] / "morphologies").glob("*.swc"))
SMALL = [path for path in STAND_INS if path.stem in ("L4_stellate_1", "L23_pyramidal_2")]
AXES = {
    "x": (1, 0, 0),
    "y": (0, 1, 0),
    "z": (0, 0, 1),
    "-x": (-1, 0, 0),
    "-y": (0, -1, 0),
    "-z": (0, 0, -1),
}


@pytest.mark.parametrize("upright", AXES)
def test_the_named_axis_turns_up_without_a_mirror(tmp_path, upright):
    """An axon along x, a basal dendrite along y, an apical one along z of the file."""
    tips = np.eye(3) * 50 + [7, -8, 9]
    rows = [[1, 1, 7, -8, 9, 5, -1]]
    rows += [[kind, kind, *tips[kind - 2], kind / 10, 1] for kind in (2, 3, 4)]
    arbor = arbor_of(write_table(tmp_path / "a.swc", np.array(rows)), upright=upright)
    last = [np.flatnonzero(arbor.kind == kind)[-1] for kind in (2, 3, 4)]
    turn = (arbor.end_um[last] / 50).T
    assert turn @ turn.T == pytest.approx(np.eye(3), abs=1e-12)
    assert np.linalg.det(turn) == pytest.approx(1)
    assert turn @ AXES[upright] == pytest.approx([0, 0, 1], abs=1e-12)
    assert arbor.start_um[arbor.kind == Kind.SOMA] == pytest.approx(0)


VARIANTS = {
    "every piece cut in two": lambda table, rng: halved(table),
    "a sample every 0.3 um": lambda table, rng: resampled(table, 0.3),
    "renumbered": renumbered,
    "reordered": lambda table, rng: rng.permutation(table),
    "all of it": lambda table, rng: rng.permutation(renumbered(halved(table), rng)),
}
ALIKE = (
    "start_um", "end_um", "start_radius_um", "end_radius_um", "kind", "parent",
    "initial", "path_um", "path_end_um",
)  # fmt: skip


def check_same_segments(one, other):
    assert one.segments_n == other.segments_n
    for name in ALIKE:
        difference = getattr(one, name).astype(float) - getattr(other, name)
        assert np.abs(difference).max() <= 1e-6, name


@pytest.mark.parametrize("variant", VARIANTS)
@pytest.mark.parametrize("source", SMALL, ids=lambda path: path.stem)
def test_stand_ins_give_the_same_segments_however_sampled(tmp_path, source, variant):
    table = VARIANTS[variant](read_table(source), np.random.default_rng(3))
    check_same_segments(
        arbor_of(source), arbor_of(write_table(tmp_path / "variant.swc", table))
    )


@pytest.mark.parametrize("variant", VARIANTS)
@pytest.mark.parametrize("step_um", [12.0, 3.0, 0.4, 0.1])
def test_made_up_trees_give_the_same_segments_however_sampled(
    tmp_path, step_um, variant
):
    rng = np.random.default_rng(11)
    table = made_up_tree(rng, samples=400, step_um=step_um)
    plain = arbor_of(write_table(tmp_path / "plain.swc", table))
    other = VARIANTS[variant](table, rng)
    check_same_segments(plain, arbor_of(write_table(tmp_path / "other.swc", other)))


@pytest.mark.parametrize("spacing_um", [0.5, 4.0, 17.3])
@pytest.mark.parametrize("source", SMALL, ids=lambda path: path.stem)
def test_no_segment_is_longer_than_the_spacing(source, spacing_um):
    arbor = arbor_of(source, min_spacing_um=spacing_um)
    assert arbor.length_um.max() <= spacing_um + 1e-6
    # Equal parts of straight pieces: cutting costs no more than one part each.
    coarse = arbor_of(source, min_spacing_um=1e6)
    parts = np.ceil(coarse.length_um / spacing_um - 1e-6).clip(1).sum()
    assert arbor.segments_n == parts
    assert arbor.length_um.sum() == pytest.approx(coarse.length_um.sum())


@pytest.mark.parametrize("ais_um", [0.0, 0.25, 17.123, 40.0, 63.9])
@pytest.mark.parametrize("source", SMALL, ids=lambda path: path.stem)
def test_the_initial_segment_ends_exactly_where_it_is_told_to(source, ais_um):
    arbor = arbor_of(source, ais_um=ais_um)
    assert (arbor.kind[arbor.initial] == Kind.AXON).all()
    axon = arbor.kind == Kind.AXON
    assert (arbor.path_end_um[arbor.initial] <= ais_um + 1e-9).all()
    assert (arbor.path_um[axon & ~arbor.initial] >= ais_um - 1e-9).all()
    if ais_um:
        assert arbor.path_end_um[arbor.initial].max() == pytest.approx(ais_um, abs=1e-9)
    else:
        assert not arbor.initial.any()


def test_every_branch_of_an_axon_is_initial_up_to_the_given_path(tmp_path):
    """The axon forks 10 um from the soma's surface; both branches are cut at 20."""
    rows = [[1, 1, 0, 0, 0, 5, -1], [2, 2, 0, -15, 0, 0.5, 1]]
    rows += [[3, 2, 40, -15, 0, 0.5, 2], [4, 2, -3, -15, 0, 0.5, 2]]
    rows += [[5, 3, 0, 15, 0, 0.5, 1]]
    arbor = arbor_of(write_table(tmp_path / "a.swc", np.array(rows)), ais_um=20.0)
    initial = arbor.end_um[arbor.initial]
    assert initial[:, 0].max() == pytest.approx(10)
    assert initial[:, 0].min() == pytest.approx(-3)
    assert arbor.length_um[arbor.initial].sum() == pytest.approx(10 + 10 + 3)


def test_path_lengths_are_those_of_the_file_from_the_surface_of_the_soma(tmp_path):
    """By hand: soma of 5 um; a right angle at 10 um; a side branch there."""
    rows = [[1, 1, 0, 0, 0, 5, -1], [2, 3, 10, 0, 0, 0.5, 1], [3, 3, 10, 20, 0, 0.5, 2]]
    rows += [
        [4, 3, 10, 0, 7, 0.4, 2],
        [5, 2, -15, 0, 0, 0.3, 1],
        [6, 3, -15, 9, 0, 1, 5],
    ]
    arbor = arbor_of(write_table(tmp_path / "a.swc", np.array(rows)), upright="z")

    def path_to(point):
        (row,) = np.flatnonzero(np.abs(arbor.end_um - point).max(axis=1) < 1e-9)
        return arbor.path_end_um[row]

    assert path_to([10, 0, 0]) == pytest.approx(5)
    assert path_to([10, 20, 0]) == pytest.approx(25)
    assert path_to([10, 0, 7]) == pytest.approx(12)
    assert path_to([-15, 0, 0]) == pytest.approx(10)
    assert path_to([-15, 9, 0]) == pytest.approx(19)
    assert arbor.path_um[arbor.parent == -1] == pytest.approx(0)
    child = np.flatnonzero(arbor.parent >= 0)
    above = arbor.parent[child]
    assert arbor.path_um[child] == pytest.approx(arbor.path_end_um[above])
    assert arbor.start_um[child] == pytest.approx(arbor.end_um[above])


def test_the_path_runs_on_across_gaps_but_no_cable_does(tmp_path):
    """Loose axon 30 um beyond the axon's tip, and a dendrite 6 um beside the soma."""
    rows = [[1, 1, 0, 0, 0, 5, -1], [2, 2, 0, -25, 0, 0.5, 1]]
    rows += [[3, 2, 0, -55, 0, 0.5, -1], [4, 2, 0, -60, 0, 0.5, 3]]
    rows += [[5, 3, 11, 0, 0, 0.5, -1], [6, 3, 31, 0, 0, 0.5, 5]]
    arbor = arbor_of(write_table(tmp_path / "a.swc", np.array(rows, float)))
    axon, basal = arbor.kind == Kind.AXON, arbor.kind == Kind.BASAL
    assert arbor.length_um[axon].sum() == pytest.approx(20 + 5)
    assert arbor.path_end_um[axon].max() == pytest.approx(20 + 30 + 5)
    assert arbor.length_um[basal].sum() == pytest.approx(20)
    assert arbor.path_um[basal].min() == pytest.approx(6)
    assert arbor.path_end_um[basal].max() == pytest.approx(26)


@pytest.mark.parametrize(
    "soma",
    [
        [[1, 1, 0, 0, 0, 5, -1]],
        [[1, 1, 0, 0, 0, 5, -1], [20, 1, 0, -5, 0, 5, 1], [21, 1, 0, 5, 0, 5, 1]],
        [[1, 1, 0, 0, 0, 5, -1], [20, 1, 4, 0, 0, 5, 1]],
    ],
    ids=["one point", "three points", "capsules"],
)
def test_neurites_begin_at_the_surface_of_the_soma(tmp_path, soma):
    rows = [*soma, [2, 2, 0, -3, 0, 0.5, 1], [3, 2, 1, -30, 0, 0.5, 2]]
    rows += [[4, 3, 0, 2, 1, 0.5, 1], [5, 3, 0, 30, 0, 1, 4], [6, 3, 0, 3, 30, 1, 4]]
    r = arbor_of(write_table(tmp_path / "a.swc", np.array(rows, float)))
    neurite = r.kind != Kind.SOMA
    balls, radii = r.start_um[~neurite], r.start_radius_um[~neurite]
    balls = np.vstack([balls, r.end_um[~neurite]])
    away = np.linalg.norm(r.start_um[neurite][:, None] - balls, axis=2)
    gap = (away - np.tile(radii, 2)).min(axis=1)
    assert gap.min() == pytest.approx(0, abs=1e-9)
    assert gap[r.parent[neurite] == -1] == pytest.approx(0, abs=1e-9)
