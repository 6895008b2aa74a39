"""Types, radii and roots that files leave open, and what a modeller is warned of."""

import numpy as np
import pytest
from builders_morphology import PLAIN, ROWS, arbor_of, course, read, said

from circuitgen.morphology import Kind


def kinds_of(r):
    return dict(zip(r.number.tolist(), r.kind.tolist(), strict=True))


def radii_of(r):
    return dict(zip(r.number.tolist(), r.radius_um.tolist(), strict=True))


@pytest.mark.parametrize("unknown", [0, 5, 6, 8, 12])
def test_unknown_types_take_the_nearest_ancestors(tmp_path, unknown):
    text = PLAIN.replace("\n3 2", f"\n3 {unknown}").replace("\n7 3", f"\n7 {unknown}")
    text = text.replace("\n8 4", f"\n8 {unknown}")
    r = read(tmp_path, text)
    assert said(r) == [("repair", "type_inherited", 3, 4)]
    plain = kinds_of(read(tmp_path, PLAIN))
    # Sample 8 leaves the soma, so no neurite is before it: basal dendrite.
    assert kinds_of(r) == plain | {8: Kind.BASAL}


def test_unknown_types_look_past_others_of_their_sort(tmp_path):
    text = PLAIN + "10 0 0 -70 0 1 3\n11 5 0 -80 0 1 10\n12 6 0 -90 0 1 11\n"
    r = read(tmp_path, text)
    assert [kinds_of(r)[n] for n in (10, 11, 12)] == [Kind.AXON] * 3


def test_glia_is_left_out_and_counted(tmp_path):
    r = read(tmp_path, PLAIN + "10 7 0 0 30 1 1\n11 7 0 0 60 1 10\n12 7 9 9 9 1 -1\n")
    assert said(r) == [("repair", "glia", 3, 11)]
    assert course(r) == course(read(tmp_path, PLAIN))
    # As in the file: glia counts.
    assert r.cable_length_um == pytest.approx(170 + 2 * np.sqrt(500) + 30 + 30)


@pytest.mark.parametrize("radius", ["0", "-1", "-0.0"])
def test_radii_of_zero_or_less_take_the_nearest_ancestors(tmp_path, radius):
    text = PLAIN.replace("0.3 2", f"{radius} 2").replace("0.4 5", f"{radius} 5")
    r = read(tmp_path, text)
    assert said(r) == [("repair", "radius_inherited", 3, 4)]
    assert radii_of(r) == radii_of(read(tmp_path, PLAIN)) | {3: 0.5, 6: 0.6, 7: 0.6}


def test_radii_without_ancestor_take_a_descendants_else_a_tenth(tmp_path):
    """Not the soma's: 4 has none before it; 8 and 9 have none at all."""
    text = (
        PLAIN.replace("0.8 1", "0 1").replace("0.6 4", "0 4").replace("0.4 5", "0 5", 1)
    )
    text = text.replace("1.5 1", "0 1").replace("80 0 1 8", "80 0 0 8")
    r = read(tmp_path, text)
    assert said(r) == [("repair", "radius_inherited", 5, 5)]
    changed = {4: 0.4, 5: 0.4, 6: 0.4, 8: 0.1, 9: 0.1}
    assert radii_of(r) == radii_of(read(tmp_path, PLAIN)) | changed


def test_doubled_points_change_no_arbor(tmp_path):
    """At a tip, in the middle of a neurite, and at a branch point."""
    text = PLAIN.replace("0.3 2", "0.3 10").replace("0.4 5", "0.4 11")
    text += "10 2 0 -10 0 0.5 2\n11 3 30 0 0 0.6 5\n12 4 0 80 0 1 9\n"
    r = read(tmp_path, text)
    assert said(r) == [("repair", "doubled", 3, 11)]
    one = arbor_of(tmp_path / "cell.swc")
    read(tmp_path, PLAIN)
    other = arbor_of(tmp_path / "cell.swc")
    assert np.abs(one.end_um - other.end_um).max() < 1e-12
    assert np.abs(one.path_end_um - other.path_end_um).max() < 1e-12


def test_an_axon_may_leave_from_a_dendrite(tmp_path):
    """The axon leaves 30 um along the dendrite: path counts from the soma."""
    text = PLAIN.replace("2 2 0 -10 0 0.5 1\n", "2 2 30 -10 0 0.5 5\n")
    r = read(tmp_path, text)
    assert r.findings == ()
    arbor = arbor_of(tmp_path / "cell.swc", ais_um=33.0)
    first = np.flatnonzero(arbor.kind == Kind.AXON)[0]
    assert arbor.kind[arbor.parent[first]] == Kind.BASAL
    assert arbor.path_um[first] == pytest.approx(25)
    assert arbor.length_um[arbor.initial].sum() == pytest.approx(33 - 25)
    # The change of kind belongs to the axon, with the axon's radius at both ends.
    assert arbor.start_radius_um[first] == 0.5


def scaled(factor):
    rows = [[*r[:2], *(str(float(v) * factor) for v in r[2:5]), *r[5:]] for r in ROWS]
    return "\n".join(map(" ".join, rows))


THICK = "\n".join(" ".join([*r[:5], f"2{r[5]}", r[6]]) for r in ROWS)
WARNED = {
    "no axon": ("\n".join(" ".join(r) for r in ROWS if r[1] != "2"), "no_axon"),
    "no dendrite": ("\n".join(" ".join(r) for r in ROWS[:3]), "no_dendrite"),
    "nanometres": (scaled(1000), "units_large"),
    "thick": (THICK, "units_large"),
    "voxels": (scaled(0.01), "units_small"),
    "equal radii": (
        "\n".join(" ".join([*r[:5], "1", r[6]]) for r in ROWS),
        "radii_equal",
    ),
}


@pytest.mark.parametrize("case", WARNED)
def test_things_to_look_at_are_warnings(tmp_path, case):
    content, code = WARNED[case]
    assert said(read(tmp_path, content)) == [("warning", code, 1, None)]


def test_all_radii_zero_are_mended_and_warned_of(tmp_path):
    rows = [[*r[:5], "0", r[6]] for r in ROWS]
    r = read(tmp_path, "\n".join(map(" ".join, rows)))
    codes = [f.code for f in r.findings]
    assert codes == ["radius_inherited", "soma_radius", "radii_equal"]
    assert set(r.radius_um[1:].tolist()) == {0.1}
    assert r.radius_um[0] == 3.0


def test_a_lone_soma_is_a_cell_with_two_warnings(tmp_path):
    r = read(tmp_path, "1 1 1 2 3 5 -1\n")
    assert [f.code for f in r.findings] == ["no_axon", "no_dendrite"]
    arbor = arbor_of(tmp_path / "cell.swc")
    assert arbor.segments_n == 1
    assert arbor.place_in_file(np.array([0]), np.array([0.3])) == (1, 1.0)
