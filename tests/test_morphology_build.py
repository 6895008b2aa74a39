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
    rerooted,
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
@pytest.mark.parametrize("seed", range(6))
def test_made_up_trees_give_the_same_segments_however_sampled(tmp_path, seed, variant):
    rng = np.random.default_rng(seed)
    table = made_up_tree(rng)
    plain = arbor_of(write_table(tmp_path / "plain.swc", table))
    other = VARIANTS[variant](table, rng)
    check_same_segments(plain, arbor_of(write_table(tmp_path / "other.swc", other)))
