"""The test for cut faces on points whose law is known; measures by slow counting."""

from __future__ import annotations

from collections import Counter
from types import SimpleNamespace

import numpy as np
import pytest
from builders_inspection import STAND_INS, inspected
from builders_morphology import PLAIN, read_table

from circuitgen.inspection import inspect_file
from circuitgen.inspection.faces import find_face
from circuitgen.morphology.arbor import Kind

CUBE_UM = 400.0


def star(tips):
    """Return a star: a straight branch from the soma to every tip."""
    count = len(tips)
    return SimpleNamespace(
        segments_n=count,
        kind=np.full(count, Kind.AXON),
        parent=np.full(count, -1),
        start_um=np.zeros((count, 3)),
        end_um=tips,
        length_um=np.linalg.norm(tips, axis=1),
    )


def test_tips_that_are_even_up_to_flat_sides_are_no_face():
    """The hardest case without a cut: a cube, where each chance is the binomial's own.

    Three slabs and about 60 candidates at 1e-5 bound the false alarms by 0.002 a
    star, 0.4 in 200 stars (P of any <= 0.33 by that bound); here there is none.
    """
    rng = np.random.default_rng(1)
    for _ in range(200):
        tips = rng.uniform(-CUBE_UM / 2, CUBE_UM / 2, (200, 3))
        assert find_face(star(tips)) is None


@pytest.mark.parametrize("jitter_um", [0.0, 0.5, 1.5])
def test_severed_branches_of_a_star_are_counted(jitter_um):
    """Tips beyond the plane move back onto it; counts are those of the construction."""
    rng = np.random.default_rng(2)
    tips = rng.normal(0.0, 100.0, (150, 3))
    normal = np.array([2.0, -1.0, 2.0]) / 3.0
    height = tips @ normal
    beyond = height > 60.0
    tips[beyond] *= (60.0 / height[beyond])[:, None]
    tips += rng.uniform(-0.5, 0.5, (150, 1)) * 2 * jitter_um * normal * beyond[:, None]
    face = find_face(star(tips))
    assert face.distance_um == pytest.approx(60.0, abs=jitter_um + 0.5)
    assert np.dot(face.normal, normal) > np.cos(np.radians(2.0))
    assert abs(face.tips_n - beyond.sum()) <= 0.15 * beyond.sum() + 2


def test_missing_cable_is_what_lies_beyond_on_the_other_side():
    rng = np.random.default_rng(3)
    tips = rng.normal(0.0, 100.0, (150, 3))
    beyond = tips[:, 0] > 50.0
    tips[beyond] *= (50.0 / tips[beyond, 0])[:, None]
    face = find_face(star(tips))
    length = np.linalg.norm(tips, axis=1)
    part = np.maximum(1.0 - 50.0 / np.maximum(-tips[:, 0], 50.0), 0.0)
    assert face.missing_um == pytest.approx((length * part).sum(), rel=0.01)


def test_few_tips_are_no_face():
    assert find_face(star(np.eye(3) * 100.0)) is None


@pytest.mark.parametrize("path", STAND_INS[::12], ids=lambda path: path.stem)
def test_tips_and_branch_points_are_those_of_the_file(path):
    """Counted from the rows; the soma is no branch point."""
    table = read_table(path)
    children = Counter(table[:, 6].astype(int).tolist())
    tips = [row for row in table if not children[int(row[0])]]
    branches = [row for row in table[1:] if children[int(row[0])] > 1]
    m = inspect_file(path).measures
    assert m.axon_tips_n == sum(row[1] == 2 for row in tips)
    assert m.axon_tips_n + m.dendrite_tips_n == len(tips)
    assert m.branch_points_n == len(branches)
    extent = np.ptp(table[:, 2:5], axis=0)
    assert np.abs(np.array(m.extent_um) - extent).max() < 2 * table[0, 5]


def test_measures_of_a_cell_by_hand(tmp_path):
    table = np.array([line.split() for line in PLAIN.splitlines()[1:]], float)
    m = inspected(tmp_path, table).measures
    slant = np.hypot(20, 10)
    # The soma has a radius of 5; pieces between soma and sample count outside it.
    assert m.axon_um == pytest.approx(55.0)
    assert m.basal_um == pytest.approx(25.0 + 2 * slant)
    assert m.apical_um == pytest.approx(75.0)
    assert m.longest_axon_path_um == pytest.approx(55.0)
    assert m.longest_dendrite_path_um == pytest.approx(75.0)
    assert (m.axon_tips_n, m.dendrite_tips_n, m.branch_points_n) == (1, 3, 1)
    assert m.soma_radius_um == 5.0
    assert m.radius_um[1:] == (0.3, 1.5)
