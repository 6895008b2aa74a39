"""The soma in each of the forms that files give it, and where neurites leave it."""

import numpy as np
import pytest
from builders_morphology import (
    PLAIN,
    arbor_of,
    check_same_segments,
    halved,
    read,
    said,
    write_table,
)

from circuitgen.morphology import Kind

NEURITES = PLAIN.partition("-1\n")[2]


def ring(radius_um, n=12, number=101, thickness=0.2, z=0.0):
    """Outline of n samples, each a child of the one before."""
    angle = 2 * np.pi * np.arange(n) / n
    return [
        f"{number + i} 1 {radius_um * np.cos(a):.9f} {radius_um * np.sin(a):.9f} {z} "
        f"{thickness} {number + i - 1 if i else -1}"
        for i, a in enumerate(angle)
    ]


def cell(tmp_path, soma, root):
    """Read the plain cell with other rows for a soma, neurites leaving from `root`."""
    lines = [line.split() for line in NEURITES.splitlines()]
    lines = [" ".join([*t[:6], root if t[6] == "1" else t[6]]) for t in lines]
    return read(tmp_path, "\n".join([*soma, *lines]))


def soma_rows(r):
    return np.flatnonzero(r.kind == Kind.SOMA)


def test_one_point_is_a_sphere(tmp_path):
    r = cell(tmp_path, ["1 1 2 3 4 6 -1"], "1")
    assert said(r) == []
    assert r.soma_center_um.tolist() == [2, 3, 4]
    assert r.radius_um[soma_rows(r)].tolist() == [6]


THREE = ["1 1 1 2 3 5 -1", "20 1 1 -3 3 5 1", "21 1 1 7 3 5 1"]


@pytest.mark.parametrize("root", ["1", "20", "21"])
def test_three_points_by_the_convention_are_the_sphere_of_the_first(tmp_path, root):
    r = cell(tmp_path, THREE, root)
    assert said(r) == []
    assert r.soma_center_um.tolist() == [1, 2, 3]
    assert r.number[soma_rows(r)].tolist() == [1]
    assert r.radius_um[soma_rows(r)].tolist() == [5]
    assert (r.parent[r.number == 2] == soma_rows(r)).all()


def test_three_points_that_are_no_convention_are_capsules(tmp_path):
    for soma in (
        ["1 1 0 0 0 5 -1", "20 1 0 -5 0 5 1", "21 1 0 5 0 4 1"],
        ["1 1 0 0 0 5 -1", "20 1 0 -8 0 5 1", "21 1 0 8 0 5 1"],
        ["1 1 0 0 0 5 -1", "20 1 0 5 0 5 1", "21 1 0 5 0 5 1"],
        ["1 1 0 0 0 5 -1", "20 1 0 -5 0 5 1", "21 1 0 5 0 5 20"],
    ):
        assert soma_rows(cell(tmp_path, soma, "1")).size == 3


@pytest.mark.parametrize("thickness", [0, 0.2, 2])
@pytest.mark.parametrize("closed", [False, True])
def test_an_outline_is_a_sphere_of_the_mean_distance(tmp_path, thickness, closed):
    n = 60
    soma = ring(8.0, n, thickness=thickness)
    if closed:
        soma.append(f"200 1 8 0 0 {thickness} {100 + n}")
    r = cell(tmp_path, soma, "101")
    assert said(r) == [("repair", "soma_outline", n + closed, 1)]
    assert np.abs(r.soma_center_um).max() < 1e-9
    # Mean distance of a regular polygon's edge, by quadrature over one half of it.
    half = np.pi / n
    low = 8 * np.cos(half)
    t = (np.arange(100_000) + 0.5) / 100_000 * 8 * np.sin(half)
    expected = np.sqrt(low**2 + t**2).mean()
    assert r.radius_um[soma_rows(r)] == pytest.approx([expected], rel=1e-9)
    assert r.number[soma_rows(r)].tolist() == [101]


def test_uneven_sampling_of_an_outline_moves_nothing(tmp_path):
    plain = cell(tmp_path, ring(8.0, 8), "101")
    soma = ring(8.0, 8)
    # Two samples more on the piece that ends at the second.
    a, b = (np.array(soma[i].split()[2:5], float) for i in (0, 1))
    extra = [
        f"{300 + k} 1 {' '.join(map(repr, (a + (b - a) * k / 3).tolist()))} 0.2 {parent}"
        for k, parent in ((1, 101), (2, 301))
    ]
    soma[1] = " ".join([*soma[1].split()[:6], "302"])
    other = cell(tmp_path, soma + extra, "101")
    assert other.soma_center_um == pytest.approx(plain.soma_center_um, abs=1e-9)
    assert other.radius_um[soma_rows(other)] == pytest.approx(
        plain.radius_um[soma_rows(plain)], abs=1e-9
    )


def test_outlines_in_several_planes_are_one_sphere(tmp_path):
    soma = ring(5.0, 12, 101, z=-3) + ring(6.0, 12, 201) + ring(5.0, 12, 301, z=3)
    r = cell(tmp_path, soma, "201")
    assert said(r) == [("repair", "soma_outline", 36, 1)]
    assert soma_rows(r).size == 1
    assert 5.5 < r.radius_um[soma_rows(r)][0] < 6.0


LINES = {
    "slim": (["1 1 -15 0 0 2 -1", "20 1 0 0 0 3 1", "21 1 15 0 0 2 20"], 0.0),
    "stout": (["1 1 0 0 0 5 -1", "20 1 0 0 4 4 1", "21 1 0 0 8 2 20"], 4.0),
    "both ways": (["1 1 0 0 0 5 -1", "20 1 0 0 9 4 1", "21 1 0 0 -3 4 1"], 3.0),
}
LINE_LENGTH_UM = {"slim": 30, "stout": 8, "both ways": 12}


@pytest.mark.parametrize("case", LINES)
def test_samples_along_a_line_are_capsules_about_their_middle(tmp_path, case):
    soma, z_um = LINES[case]
    r = cell(tmp_path, soma, "1")
    assert said(r) == []
    assert r.soma_center_um.tolist() == pytest.approx([0, 0, z_um])
    arbor = arbor_of(tmp_path / "cell.swc", min_spacing_um=100.0, upright="z")
    own = arbor.kind == Kind.SOMA
    assert arbor.length_um[own].sum() == pytest.approx(LINE_LENGTH_UM[case])
    assert own[: own.sum()].all()
    assert (arbor.parent[own] == -1).all()
    assert (arbor.path_end_um[own] == 0).all()
    radii = np.concatenate([arbor.start_radius_um[own], arbor.end_radius_um[own]])
    assert sorted(set(radii)) == sorted({float(row.split()[5]) for row in soma})


@pytest.mark.parametrize("case", LINES)
def test_halving_the_pieces_of_a_soma_changes_no_segment(tmp_path, case):
    cell(tmp_path, LINES[case][0], "20")
    table = np.loadtxt(tmp_path / "cell.swc")
    plain = arbor_of(tmp_path / "cell.swc")
    path = write_table(tmp_path / "other.swc", halved(table, soma=True))
    check_same_segments(plain, arbor_of(path))


def test_a_soma_is_made_where_there_is_none(tmp_path):
    text = "1 3 5 0 0 0.5 -1\n2 3 45 0 0 0.4 1\n3 2 5 -40 0 0.3 1\n"
    r = read(tmp_path, text)
    assert said(r) == [("warning", "soma_made", 1, None)]
    assert "3.0 um radius" in r.findings[0].text
    assert r.soma_center_um.tolist() == [5, 0, 0]
    assert r.radius_um[soma_rows(r)].tolist() == [3]
    assert arbor_of(tmp_path / "cell.swc").path_end_um.max() == pytest.approx(37)
    r = read(tmp_path, text.replace("0.5 -1", "7.5 -1"))
    assert r.radius_um[soma_rows(r)].tolist() == [7.5]


def test_the_made_soma_is_on_the_tree_with_the_most_cable(tmp_path):
    """However few samples it has."""
    text = (
        "1 3 0 0 0 1 -1\n2 3 2 0 0 1 1\n3 3 4 0 0 1 2\n4 3 0 9 0 1 -1\n5 3 0 99 0 2 4\n"
    )
    r = read(tmp_path, text)
    assert r.number[soma_rows(r)].tolist() == [4]


def test_a_soma_without_radius_is_given_one(tmp_path):
    r = cell(tmp_path, ["1 1 0 0 0 0 -1"], "1")
    assert said(r) == [("warning", "soma_radius", 1, 1)]
    assert r.radius_um[soma_rows(r)].tolist() == [3]
    r = cell(tmp_path, ["1 1 0 0 0 0 -1", "20 1 0 3 0 6 1"], "1")
    assert r.radius_um[soma_rows(r)].tolist() == [6, 6]


def test_soma_samples_apart_are_not_soma(tmp_path):
    """A dendrite's sample of the wrong type; a second cell's soma."""
    text = PLAIN.replace("\n6 3", "\n6 1") + "30 1 200 0 0 4 -1\n31 3 250 0 0 1 30\n"
    r = read(tmp_path, text)
    assert said(r)[0] == ("warning", "soma_apart", 2, 7)
    assert r.number[soma_rows(r)].tolist() == [1]
    assert r.kind[r.number == 6] == Kind.BASAL


def test_soma_samples_side_by_side_are_one_soma(tmp_path):
    r = cell(tmp_path, ["1 1 0 0 0 5 -1", "20 1 0 3 0 4 -1"], "1")
    assert said(r) == []
    assert soma_rows(r).size == 2
    arbor = arbor_of(tmp_path / "cell.swc")
    assert arbor.length_um[arbor.kind == Kind.SOMA].tolist() == [0, 0]


def test_a_tree_that_the_file_roots_at_a_tip_is_turned_round(tmp_path):
    parent = {9: -1, 8: 9, 1: 8}
    rows = [line.split() for line in PLAIN.splitlines()[1:]]
    rows = [[*t[:6], str(parent.get(int(t[0]), t[6]))] for t in rows]
    r = read(tmp_path, "\n".join(map(" ".join, rows)))
    assert said(r) == [("repair", "rerooted", 1, 1)]
    plain = read(tmp_path, PLAIN)
    for name in ("number", "position_um", "begin_um"):
        order = np.argsort(r.number)
        assert (getattr(r, name)[order] == getattr(plain, name)).all()
    turned = set(zip(r.piece.tolist(), r.backward.tolist(), strict=True))
    # The file ends pieces 8-9 and 1-8 at samples 8 and 1; sample 1 is the root now.
    assert turned == {(n, False) for n in range(1, 8)} | {(8, True), (1, True)}


CAPSULE = ["1 1 0 -8 0 4 -1", "20 1 0 8 0 6 1"]
STEMS = {
    "one point": (["1 1 0 0 0 5 -1"], "1"),
    "three points": (THREE, "21"),
    "capsule": (CAPSULE, "1"),
    "outline": (ring(8.0), "107"),
    "outline, from the far side": (ring(8.0), "101"),
}
STEM = "40 2 -2 -1 0 0.5 {0}\n41 2 -3 -4 1 0.5 40\n42 2 -40 3 9 0.5 41\n"
STEM += "43 3 -2 2 0 0.5 {0}\n44 3 -30 0 30 0.6 43\n45 3 -30 4 -30 0.7 43\n"


@pytest.mark.parametrize("case", STEMS)
def test_neurites_begin_on_the_surface_of_the_soma(tmp_path, case):
    """Axon bent inside the soma; dendrite that branches inside it."""
    soma, root = STEMS[case]
    r = read(tmp_path, "\n".join(soma) + "\n" + STEM.format(root))
    arbor = arbor_of(tmp_path / "cell.swc", upright="z")
    own = arbor.kind == Kind.SOMA
    first = np.flatnonzero(~own & (arbor.parent == -1))
    assert first.size == 3
    assert (arbor.path_um[first] == 0).all()
    start = arbor.start_um[first]
    if case == "capsule":
        # All spheres about the axis, one by one.
        part = np.linspace(0, 1, 20_001)
        axis = np.column_stack([0 * part, 16 * part - 8, 0 * part]) - r.soma_center_um
        gap = [(np.linalg.norm(axis - p, axis=1) - 4 - 2 * part).min() for p in start]
        # Spheres 0.0008 um apart leave dents of less than 1e-7 um.
        assert gap == pytest.approx([0, 0, 0], abs=1e-7)
    else:
        radius = arbor.soma_radius_um
        assert np.linalg.norm(start, axis=1) == pytest.approx(radius, abs=1e-9)
        # No cable inside: the courses above go straight outward.
        middle = (arbor.start_um + arbor.end_um)[~own] / 2
        assert (np.linalg.norm(middle, axis=1) > radius).all()


def test_a_neurite_that_stays_inside_the_soma_has_no_cable(tmp_path):
    read(tmp_path, PLAIN + "20 3 0 0 2 1 1\n21 3 0 1 2 1 20\n")
    other = arbor_of(tmp_path / "cell.swc")
    read(tmp_path, PLAIN)
    check_same_segments(arbor_of(tmp_path / "cell.swc"), other)
