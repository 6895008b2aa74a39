"""Places on segments lead back to the samples of the file, and the course is kept."""

from pathlib import Path

import numpy as np
import pytest
from builders_morphology import (
    arbor_of,
    made_up_tree,
    read_table,
    rerooted,
    resampled,
    write_table,
)

from circuitgen.morphology import Kind

STAND_INS = sorted((Path(__file__).parents[1] / "morphologies").glob("*_2.swc"))
# What simplify.py promises: course within 0.1 um, radius within 0.05 um.
COURSE_UM, RADIUS_UM = 0.1, 0.05
# Upright y: a row (x, y, z) of the file becomes (x, -z, y).
TURN = np.array([[1, 0, 0], [0, 0, 1], [0, -1, 0]])


def places_in_file(table, number, fraction):
    """Return the points that samples and fractions mean, soma centre at the origin."""
    row_of = {int(n): i for i, n in enumerate(table[:, 0])}
    end = table[[row_of[n] for n in number.tolist()]]
    start = table[[row_of[int(n)] for n in end[:, 6]]]
    point = start[:, 2:5] + fraction[:, None] * (end - start)[:, 2:5]
    soma = table[table[:, 1] == 1][0, 2:5]
    return (point - soma) @ TURN


def check_places(arbor, table, rng, count=5000):
    neurites = np.flatnonzero(arbor.kind != Kind.SOMA)
    segment = rng.choice(neurites, count)
    fraction = rng.choice([0.0, 1.0, *rng.random(8)], count)
    number, inside = arbor.place_in_file(segment, fraction)
    assert ((inside >= 0) & (inside <= 1)).all()
    start, end = arbor.start_um[segment], arbor.end_um[segment]
    here = start + fraction[:, None] * (end - start)
    away = np.linalg.norm(places_in_file(table, number, inside) - here, axis=1)
    assert away.max() <= COURSE_UM + 1e-6


@pytest.mark.parametrize("source", STAND_INS, ids=lambda path: path.stem)
def test_places_on_stand_ins_lie_there_in_the_file(source):
    check_places(arbor_of(source), read_table(source), np.random.default_rng(1))


@pytest.mark.parametrize("seed", range(8))
def test_places_on_made_up_trees_lie_there_in_the_file(tmp_path, seed):
    rng = np.random.default_rng(seed)
    table = made_up_tree(rng, samples=200, step_um=[6.0, 0.5][seed % 2])
    path = write_table(tmp_path / "a.swc", table)
    check_places(arbor_of(path), table, rng)


def test_a_course_that_trembles_here_and_not_there_keeps_its_places(tmp_path):
    """Straight for 60 um, then trembling by 0.045 um at every 0.3 um: 4 % longer.

    The straight piece that stands for both must not be mapped evenly.
    """
    x = np.concatenate([np.arange(5.0, 65.0, 5.0), np.arange(65.0, 125.0, 0.3)])
    y = np.where(x >= 65, 0.045 * (-1.0) ** np.arange(x.size), 0.0)
    n = x.size
    columns = [np.arange(2, n + 2), np.full(n, 3), x, y, 0 * x, 0.5 + 0 * x]
    rows = np.column_stack([*columns, np.arange(1, n + 1)])
    table = np.vstack([[1, 1, 0, 0, 0, 5, -1], rows])
    path = write_table(tmp_path / "a.swc", table)
    check_places(arbor_of(path), table, np.random.default_rng(1))


def test_a_narrow_hairpin_is_kept(tmp_path):
    """To 40 um, back to 20 um and on to 60 um along one line: 100 um of cable."""
    x = [10.0, 40.0, 20.0, 60.0]
    rows = [[1, 1, 0, 0, 0, 5, -1]]
    rows += [[i + 2, 3, at, 0, 0, 0.5, i + 1] for i, at in enumerate(x)]
    table = np.array(rows, float)
    arbor = arbor_of(write_table(tmp_path / "a.swc", table))
    assert arbor.path_end_um.max() == pytest.approx(95)
    assert arbor.length_um.sum() == pytest.approx(95)
    check_places(arbor, table, np.random.default_rng(1))


def tips(table):
    return table[~np.isin(table[:, 0], table[:, 6]), 0].astype(int)


@pytest.mark.parametrize("source", STAND_INS[::4], ids=lambda path: path.stem)
def test_places_are_right_in_a_file_rooted_at_a_tip(tmp_path, source):
    table = read_table(source)
    rng = np.random.default_rng(5)
    turned = rerooted(table, rng.choice(tips(table)))
    arbor = arbor_of(write_table(tmp_path / "turned.swc", turned))
    plain = arbor_of(source)
    assert arbor.segments_n == plain.segments_n
    assert np.abs(arbor.end_um - plain.end_um).max() <= 1e-6
    assert np.abs(arbor.path_end_um - plain.path_end_um).max() <= 1e-6
    assert arbor.piece_backward.any()
    check_places(arbor, turned, rng)


def test_backward_pieces_run_from_parent_to_sample_of_the_file(tmp_path):
    """The dendrite's tip is the file's root: its pieces end at samples 2 and 1."""
    rows = [[1, 1, 0, 0, 0, 5, 2], [2, 3, 20, 0, 0, 0.5, 3], [3, 3, 40, 0, 0, 0.5, -1]]
    rows += [[4, 2, -60, 0, 0, 0.5, 1]]
    table = np.array(rows, float)
    arbor = arbor_of(write_table(tmp_path / "a.swc", table))
    for x_um, number, fraction in ((10, 1, 0.5), (30, 2, 0.5), (39, 2, 0.05)):
        start, end = arbor.start_um[:, 0], arbor.end_um[:, 0]
        row = np.flatnonzero((start <= x_um) & (x_um < end) & (arbor.kind == 3))[:1]
        inside = (x_um - start[row]) / (end[row] - start[row])
        found, place = arbor.place_in_file(row, inside)
        assert found.tolist() == [number]
        assert place == pytest.approx([fraction])


@pytest.mark.parametrize("step_um", [None, 0.3])
@pytest.mark.parametrize("source", STAND_INS[1::5], ids=lambda path: path.stem)
def test_the_course_is_kept_within_its_tolerance(tmp_path, source, step_um):
    table = read_table(source)
    if step_um:
        table = resampled(table, step_um)
    arbor = arbor_of(write_table(tmp_path / "a.swc", table))
    samples = table[np.isin(table[:, 1], (2, 3, 4))]
    samples = samples[np.linalg.norm(samples[:, 2:5], axis=1) > arbor.soma_radius_um]
    samples = samples[:: max(len(samples) // 1000, 1)]
    met = [is_on_course(arbor, row) for row in samples]
    assert len(met) >= 1000
    assert all(met)
    if step_um:
        assert arbor.segments_n < len(table) / 4


def is_on_course(arbor, row):
    """Tell whether a sample lies on some segment of its kind, radius included."""
    mine = arbor.kind == row[1]
    start, step = arbor.start_um[mine], (arbor.end_um - arbor.start_um)[mine]
    offset = row[2:5] @ TURN - start
    part = np.clip((offset * step).sum(axis=1) / (step**2).sum(axis=1), 0, 1)
    away = np.linalg.norm(offset - part[:, None] * step, axis=1)
    radius = arbor.start_radius_um[mine]
    radius = radius + part * (arbor.end_radius_um[mine] - radius)
    near = (away <= COURSE_UM + 1e-6) & (np.abs(radius - row[5]) <= RADIUS_UM + 1e-6)
    return near.any()
