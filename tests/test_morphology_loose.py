"""Pieces without a soma: joined to the soma, kept across gaps, or left out."""

import numpy as np
import pytest
from builders_morphology import (
    PLAIN,
    arbor_of,
    check_same_segments,
    course,
    halved,
    made_up_tree,
    read,
    renumbered,
    said,
    write_table,
)
from oracles_morphology import nearest_on_pieces

from circuitgen.core.errors import InputError
from circuitgen.morphology import Kind
from circuitgen.morphology.loose import JOIN_LOOSE_UM, MOST_LOOSE


def loose_axon(gap_um):
    """Return axon beyond the plain axon's tip at y = -60, 30 um long."""
    y = -60 - gap_um
    return f"20 2 0 {y} 0 0.3 -1\n21 2 0 {y - 30} 0 0.2 20\n"


@pytest.mark.parametrize(("gap_um", "kept"), [(49.9, True), (50.1, False)])
def test_loose_pieces_are_kept_near_and_left_out_far(tmp_path, gap_um, kept):
    r = read(tmp_path, PLAIN + loose_axon(gap_um))
    if kept:
        assert said(r) == [("repair", "loose_kept", 1, 11)]
        assert "1 loose piece (30 um of cable) kept across gaps" in r.findings[0].text
        row = np.flatnonzero(r.number == 20)
        assert r.bridged[row].all()
        assert r.bridged.sum() == 1
        assert r.number[r.parent[row]].tolist() == [3]
        assert r.begin_um[row].tolist() == [[0, -60, 0]]
    else:
        assert said(r) == [("warning", "loose_dropped", 1, 11)]
        assert "1 loose piece (30 um of cable) farther" in r.findings[0].text
        assert course(r) == course(read(tmp_path, PLAIN))


def test_path_runs_on_from_the_nearest_point_of_cable_across_the_gap(tmp_path):
    """Beside the middle of the axon's last piece: from y = -35, 20 um aside."""
    read(tmp_path, PLAIN + "20 2 20 -35 0 0.3 -1\n21 2 60 -35 0 0.2 20\n")
    arbor = arbor_of(tmp_path / "cell.swc", upright="z")
    first = np.flatnonzero((arbor.start_um == [20, -35, 0]).all(axis=1))[0]
    assert arbor.path_um[first] == pytest.approx(30 + 20)
    assert arbor.path_end_um[arbor.kind == Kind.AXON].max() == pytest.approx(50 + 40)
    host = arbor.parent[first]
    assert arbor.path_um[host] <= 30 <= arbor.path_end_um[host]
    # The gap is no cable: 55 um of axon outside the soma and the loose 40 um.
    axon = arbor.kind == Kind.AXON
    assert arbor.length_um[axon].sum() == pytest.approx(55 + 40)


def test_pieces_join_cable_of_their_kind_even_if_other_cable_is_nearer(tmp_path):
    """5 um beside the apical dendrite, but 36 um from the axon."""
    text = PLAIN + "20 2 5 26 0 0.3 -1\n21 2 30 26 0 0.2 20\n"
    r = read(tmp_path, text)
    assert r.number[r.parent[r.number == 20]].tolist() == [2]
    r = read(tmp_path, text.replace("20 2", "20 3").replace("21 2", "21 3"))
    assert r.number[r.parent[r.number == 20]].tolist() == [9]


def test_without_cable_of_their_kind_they_join_whatever_is_near(tmp_path):
    """The only axon begins 30 um below the soma's surface."""
    rows = [line for line in PLAIN.splitlines() if line[2:3] != "2"]
    r = read(tmp_path, "\n".join(rows) + "\n2 2 0 -35 0 0.5 -1\n3 2 0 -99 0 0.3 2\n")
    assert said(r) == [("repair", "loose_kept", 1, 9)]
    assert r.kind[r.parent[r.number == 2]].tolist() == [Kind.SOMA]
    arbor = arbor_of(tmp_path / "cell.swc")
    assert arbor.path_um[arbor.kind == Kind.AXON].min() == pytest.approx(30)
    assert arbor.length_um[arbor.initial].sum() == pytest.approx(10)


def test_a_piece_is_joined_by_its_nearest_end(tmp_path):
    """The file's root of the loose axon is its far end; a tip is 10 um away."""
    text = PLAIN + "20 2 0 -150 0 0.3 -1\n21 2 0 -110 0 0.2 20\n22 2 0 -70 0 0.2 21\n"
    r = read(tmp_path, text)
    assert said(r) == [("repair", "loose_kept", 1, 11)]
    assert r.number[r.bridged].tolist() == [22]
    turned = {21: (22, True), 20: (21, True), 22: (22, False)}
    for number, (piece, backward) in turned.items():
        row = r.number == number
        assert (r.piece[row].tolist(), r.backward[row].tolist()) == ([piece], [backward])
    arbor = arbor_of(tmp_path / "cell.swc")
    assert arbor.path_end_um[arbor.kind == Kind.AXON].max() == pytest.approx(
        55 + 10 + 80
    )
    # At the end, the file's own sample 20 is at fraction 0 of the piece of 21.
    last = np.flatnonzero(arbor.kind == Kind.AXON)[-1:]
    number, fraction = arbor.place_in_file(last, np.ones(1))
    assert (number.tolist(), fraction.tolist()) == ([21], [0])


def test_pieces_that_were_joined_carry_others(tmp_path):
    text = PLAIN + loose_axon(40) + "30 2 0 -170 0 0.3 -1\n31 2 0 -200 0 0.3 30\n"
    r = read(tmp_path, text)
    assert said(r) == [("repair", "loose_kept", 2, 11)]
    assert r.number[r.parent[r.number == 30]].tolist() == [21]
    arbor = arbor_of(tmp_path / "cell.swc")
    assert arbor.path_end_um[arbor.kind == Kind.AXON].max() == pytest.approx(195)


@pytest.mark.parametrize(("z_um", "joined"), [(14.9, True), (15.1, False)])
def test_a_root_within_10_um_of_the_somas_surface_leaves_it(tmp_path, z_um, joined):
    r = read(tmp_path, PLAIN + f"20 3 0 0 {z_um} 0.4 -1\n21 3 0 0 60 0.4 20\n")
    row = r.number == 20
    assert (r.kind[r.parent[row]] == Kind.SOMA).all() == joined
    assert r.bridged[row].all()
    code = "soma_joined" if joined else "loose_kept"
    assert said(r) == [("repair", code, 1, 11)]
    if joined:
        assert r.begin_um[row] == pytest.approx(np.array([[0, 0, 5]]))
        arbor = arbor_of(tmp_path / "cell.swc")
        new = (arbor.end_radius_um == 0.4) & (arbor.start_um[:, 1] < -14)
        assert arbor.path_um[new].min() == pytest.approx(z_um - 5)
        assert arbor.parent[new].min() == -1


def test_a_root_inside_the_soma_needs_no_repair(tmp_path):
    r = read(tmp_path, PLAIN + "20 3 0 0 3 0.4 -1\n21 3 0 0 60 0.4 20\n")
    assert r.findings == ()
    arbor = arbor_of(tmp_path / "cell.swc", upright="z")
    own = arbor.end_um[:, 2] > 0
    # From the surface: the first 2 um lie inside the soma.
    assert arbor.path_um[own].min() == 0
    assert arbor.start_um[own, 2].min() == pytest.approx(5)
    assert arbor.path_end_um[own].max() == pytest.approx(55)


def test_samples_alone_are_left_out(tmp_path):
    r = read(tmp_path, PLAIN + "20 3 0 0 3 0.4 -1\n21 2 0 0 60 0.4 -1\n")
    assert said(r) == [("repair", "lone", 2, 11)]
    assert course(r) == course(read(tmp_path, PLAIN))


def test_more_loose_pieces_than_a_tracing_can_have_are_refused(tmp_path):
    def pieces(n):
        rows = [
            f"{20 + 2 * i} 2 0 {-i} 9 1 -1\n{21 + 2 * i} 2 1 {-i} 9 1 {20 + 2 * i}"
            for i in range(n)
        ]
        return PLAIN + "\n".join(rows)

    assert len(read(tmp_path, pieces(MOST_LOOSE)).findings) == 2
    with pytest.raises(
        InputError, match=r"cell.swc:11: begins one of 1001 loose pieces"
    ):
        read(tmp_path, pieces(MOST_LOOSE + 1))


def in_pieces(table, rng, cuts):
    """Cut a tree into loose pieces at random samples, not beside its soma."""
    out = table.copy()
    inner = np.flatnonzero((table[:, 6] > 1) & np.isin(table[:, 0], table[:, 6]))
    out[rng.choice(inner, cuts, replace=False), 6] = -1
    return out


@pytest.mark.parametrize("seed", range(6))
def test_gaps_are_the_nearest_by_brute_force(tmp_path, seed):
    rng = np.random.default_rng(seed)
    table = in_pieces(made_up_tree(rng, samples=160, step_um=20.0), rng, 8)
    r = read(tmp_path, write_table(tmp_path / "a.swc", table).read_bytes())
    is_axon = r.kind == Kind.AXON
    bridges = np.flatnonzero(r.bridged & (r.kind[r.parent] != Kind.SOMA))
    # Cable beyond a bridge hangs on it; all other cable of the kind was a choice.
    beyond = {int(bridge): {int(bridge)} for bridge in bridges}
    for row in range(r.kind.size):
        for members in beyond.values():
            if int(r.parent[row]) in members:
                members.add(row)
    assert bridges.size > 2
    for bridge in bridges:
        others = (is_axon == is_axon[bridge]) & (r.kind != Kind.SOMA)
        others[list(beyond[int(bridge)])] = False
        start = np.where(r.bridged[:, None], r.position_um, r.begin_um)[others]
        expected = nearest_on_pieces(r.position_um[bridge], start, r.position_um[others])
        gap = np.linalg.norm(r.position_um[bridge] - r.begin_um[bridge])
        assert gap == pytest.approx(expected)
        assert gap <= JOIN_LOOSE_UM


@pytest.mark.parametrize("seed", range(6))
def test_sampling_and_numbering_change_no_segment_of_cells_in_pieces(tmp_path, seed):
    rng = np.random.default_rng(seed)
    table = in_pieces(made_up_tree(rng, samples=160, step_um=20.0), rng, 8)
    path = write_table(tmp_path / "a.swc", table)
    plain = arbor_of(path)
    codes = [finding.code for finding in read(tmp_path, path.read_bytes()).findings]
    assert "loose_kept" in codes
    other = rng.permutation(renumbered(halved(table), rng))
    check_same_segments(plain, arbor_of(write_table(tmp_path / "b.swc", other)))
