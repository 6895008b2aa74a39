"""SWC files as they are found: accepted as they are, repaired and said so, or refused.

Format: the public specification of SWC 1.0 (seven columns: number, type, x, y, z,
radius, parent).
"""

import numpy as np
import pytest

from circuitgen.core.errors import InputError
from circuitgen.morphology import Kind, read_reconstruction

# Soma, axon down, basal dendrite aside with a branch, apical dendrite up.
PLAIN = """\
# a made-up cell
1 1 0 0 0 5 -1
2 2 0 -10 0 0.5 1
3 2 0 -60 0 0.3 2
4 3 10 0 0 0.8 1
5 3 30 0 0 0.6 4
6 3 50 10 0 0.4 5
7 3 50 -10 0 0.4 5
8 4 0 20 0 1.5 1
9 4 0 80 0 1 8
"""
ROWS = [line.split() for line in PLAIN.splitlines()[1:]]
KINDS = [2, 2, 3, 3, 3, 3, 4, 4]


def read(tmp_path, content):
    path = tmp_path / "cell.swc"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return read_reconstruction(path)


def said(reconstruction):
    return [(f.severity, f.text, f.count, f.line) for f in reconstruction.findings]


def course(r):
    """Set of pieces by their two ends, kind and radius: what the file means."""
    before = np.where(r.parent[:, None] >= 0, r.position_um[r.parent], r.stem_um)
    rows = np.column_stack([before, r.position_um, r.kind, r.radius_um])
    return sorted(map(tuple, np.round(rows, 9)))


def renumbered(rows, number):
    """Write rows with new numbers."""
    new = {row[0]: str(number(int(row[0]))) for row in rows} | {"-1": "-1"}
    return "\n".join(" ".join([new[r[0]], *r[1:6], new[r[6]]]) for r in rows) + "\n"


def test_the_plain_file_is_read_as_written(tmp_path):
    r = read(tmp_path, PLAIN)
    assert r.findings == ()
    assert r.name == "cell"
    assert sorted(r.kind.tolist()) == KINDS
    assert r.soma.radius_um.tolist() == [5.0]
    assert r.soma.center_um.tolist() == [0.0, 0.0, 0.0]
    # By hand: 10 + 50 + 10 + 20 + 2 sqrt(20^2 + 10^2) + 20 + 60.
    assert r.file_cable_um == pytest.approx(170 + 2 * np.sqrt(500))
    assert (r.parent < np.arange(r.parent.size)).all()


SAME_CELL = {
    "no header": PLAIN.partition("\n")[2],
    "CRLF": PLAIN.replace("\n", "\r\n"),
    "old Mac line ends": PLAIN.replace("\n", "\r"),
    "tabs": PLAIN.replace(" ", "\t"),
    "leading blanks": "\n".join(f"   {line}" for line in PLAIN.splitlines()),
    "trailing blanks": PLAIN.replace("\n", "  \t\n"),
    "blank lines": PLAIN.replace("\n", "\n\n"),
    "no last line end": PLAIN.rstrip("\n"),
    "byte order mark": b"\xef\xbb\xbf" + PLAIN.encode(),
    "Latin-1 comment": b"# caf\xe9 \xb5m\n" + PLAIN.encode(),
    "comments of any style": "#\n##id,type\n  # x\n#1 1 0 0 0 5 -1\n" + PLAIN,
    "comments at line ends": PLAIN.replace("\n", " # note\n"),
    "more columns": PLAIN.replace("\n", " 7 x\n").replace("cell 7 x", "cell"),
    "numbers with points": renumbered(ROWS, lambda n: f"{n}.0"),
    "scientific notation": PLAIN.replace(" -60 ", " -6.0e1 ").replace(" 80 ", " 8E+01 "),
    "plus signs": PLAIN.replace(" 80 ", " +80 "),
    "from 0": renumbered(ROWS, lambda n: n - 1),
    "from 300000": renumbered(ROWS, lambda n: n + 299_999),
    "beyond 1e8": renumbered(ROWS, lambda n: n + 10**12),
    "gaps": renumbered(ROWS, lambda n: 17 * n),
    "ids unsorted": renumbered(ROWS, lambda n: 7 * n % 11),
    "children before parents": renumbered(ROWS[::-1], lambda n: n),
    "rows shuffled": renumbered([ROWS[i] for i in (4, 8, 0, 2, 6, 1, 3, 5, 7)], int),
}


@pytest.mark.parametrize("case", SAME_CELL)
def test_other_spellings_of_the_plain_file_give_the_same_cell(tmp_path, case):
    r = read(tmp_path, SAME_CELL[case])
    assert said(r) == []
    assert course(r) == course(read(tmp_path, PLAIN))
    assert r.soma.radius_um.tolist() == [5.0]


def repaired(text, count, line):
    return ("repair", text, count, line)


def warned(text, line=None):
    return ("warning", text, 1, line)


REPAIRED = {
    "roots marked 0": (
        PLAIN.replace("5 -1", "5 0"),
        repaired("1 roots marked by something else than -1", 1, None),
    ),
    "roots marked -2": (
        PLAIN.replace("5 -1", "5 -2"),
        repaired("1 roots marked by something else than -1", 1, None),
    ),
    "doubled points": (
        PLAIN + "10 4 0 80 0 1 9\n11 4 0 90 0 1 10\n",
        repaired("doubled points merged", 1, 11),
    ),
    "zero radius": (
        PLAIN.replace("50 10 0 0.4", "50 10 0 0"),
        repaired("radii of zero or less take their ancestor's", 1, 7),
    ),
    "negative radii": (
        PLAIN.replace("0.4", "-0.4"),
        repaired("radii of zero or less take their ancestor's", 2, 7),
    ),
    "types 0, 5, 6 and above 7": (
        PLAIN.replace("3 2 0 -60", "3 5 0 -60")
        .replace("6 3", "6 6")
        .replace("7 3", "7 0")
        .replace("9 4", "9 12"),
        repaired("samples of unknown type take their ancestor's", 4, 4),
    ),
    "unknown at the soma": (
        PLAIN.replace("4 3 10", "4 0 10"),
        repaired("samples of unknown type take their ancestor's", 1, 5),
    ),
    "glia": (PLAIN + "10 7 9 9 9 1 1\n", repaired("samples of glia left out", 1, 11)),
}


@pytest.mark.parametrize("case", REPAIRED)
def test_repairs_are_made_and_reported(tmp_path, case):
    content, finding = REPAIRED[case]
    r = read(tmp_path, content)
    assert said(r) == [finding]
    if case != "doubled points":
        assert sorted(r.kind.tolist()) == KINDS
    assert (r.radius_um > 0).all()


def test_a_mended_radius_is_the_ancestors(tmp_path):
    r = read(tmp_path, PLAIN.replace("6 3 50 10 0 0.4", "6 3 50 10 0 -1"))
    assert r.radius_um[r.piece == 6] == 0.6
    r = read(tmp_path, PLAIN.replace("2 2 0 -10 0 0.5", "2 2 0 -10 0 0"))
    assert r.radius_um[r.piece == 2] == 0.1


# Rows of the soma, its middle, its radius, finding: sphere and capsules by hand.
RING = [
    (f"{10 + i} 1 {8 * np.cos(a):.6f} {8 * np.sin(a):.6f} 0 0.2 {9 + i if i else -1}")
    for i, a in enumerate(2 * np.pi * np.arange(12) / 12)
]
SOMATA = {
    "one point": (["1 1 2 3 4 6 -1"], (2, 3, 4), [6.0], []),
    "three points": (
        ["1 1 0 0 0 5 -1", "20 1 0 -5 0 5 1", "21 1 0 5 0 5 1"],
        (0, 0, 0),
        [5.0],
        [],
    ),
    "contour": (
        [*RING, "1 1 8 0 0 0.2 21"],
        None,
        None,
        [repaired("soma contour taken as a sphere of 8.0 um", 1, None)],
    ),
    "capsules": (
        ["1 1 0 0 0 5 -1", "20 1 0 4 0 4 1", "21 1 0 8 0 2 20"],
        (0, 4, 0),
        [5.0, 4.0, 2.0],
        [],
    ),
}


@pytest.mark.parametrize("case", SOMATA)
def test_a_soma_is_taken_in_each_of_its_forms(tmp_path, case):
    rows, middle, radii, findings = SOMATA[case]
    r = read(tmp_path, "\n".join(rows) + PLAIN.partition("-1")[2])
    assert said(r) == findings
    if middle is not None:
        assert r.soma.center_um.tolist() == pytest.approx(middle)
        assert sorted(r.soma.radius_um.tolist(), reverse=True) == radii
    else:
        # Thirteen points, one of them double: the mean is not quite the middle.
        assert np.linalg.norm(r.soma.center_um) < 1
        assert r.soma.radius_um == pytest.approx([8.0], abs=0.1)
    assert sorted(r.kind.tolist()) == KINDS
    assert (r.parent[np.isin(r.piece, [2, 4, 8])] == -1).all()


def test_a_soma_is_made_where_there_is_none(tmp_path):
    text = "1 3 0 0 0 0.5 -1\n2 3 40 0 0 0.4 1\n3 2 0 -40 0 0.3 1\n"
    r = read(tmp_path, text)
    assert said(r) == [
        warned("no soma: one of 3.0 um made at the root of the largest tree")
    ]
    assert r.soma.center_um.tolist() == [0, 0, 0]
    assert r.soma.radius_um.tolist() == [3.0]
    r = read(tmp_path, "9 3 99 0 0 8 -1\n" + text.replace("0 0.5 -1", "0 7.5 -1"))
    assert r.soma.radius_um.tolist() == [7.5]
    assert "one of 7.5 um" in said(r)[0][1]


WARNED = {
    "no axon": ("\n".join(" ".join(r) for r in ROWS if r[1] != "2"), "no axon: the"),
    "no dendrite": ("\n".join(" ".join(r) for r in ROWS[:3]), "no dendrite: only"),
    "nanometres": (
        "\n".join(
            " ".join([*r[:2], *(f"{v}000" for v in r[2:5]), *r[5:]]) for r in ROWS
        ),
        "extent 140000 um: are the units nanometres?",
    ),
    "voxels": (
        "\n".join(
            " ".join([*r[:2], *(str(float(v) / 100) for v in r[2:5]), *r[5:]])
            for r in ROWS
        ),
        "extent 1.4 um: are the units voxels or millimetres?",
    ),
    "equal radii": (
        "\n".join(" ".join([*r[:5], "1", r[6]]) for r in ROWS),
        "all radii are 1 um: probably not measured",
    ),
}


@pytest.mark.parametrize("case", WARNED)
def test_things_to_look_at_are_warnings(tmp_path, case):
    content, words = WARNED[case]
    (finding,) = read(tmp_path, content).findings
    assert finding.severity == "warning"
    assert words in finding.text


def test_an_axon_may_leave_from_a_dendrite(tmp_path):
    r = read(tmp_path, PLAIN.replace("0.5 1\n", "0.5 5\n"))
    assert r.findings == ()
    axon = int(np.flatnonzero(r.piece == 2)[0])
    assert r.kind[axon] == Kind.AXON
    assert r.kind[r.parent[axon]] == Kind.BASAL


def test_a_tree_that_the_file_roots_at_a_tip_is_turned_round(tmp_path):
    parent = {9: -1, 8: 9, 1: 8}
    rows = [[*r[:6], str(parent.get(int(r[0]), r[6]))] for r in ROWS]
    r = read(tmp_path, "\n".join(" ".join(row) for row in rows))
    assert said(r) == [
        repaired("tree rooted at its soma, not where the file has its root", 1, None)
    ]
    assert course(r) == course(read(tmp_path, PLAIN))
    turned = {(int(r.piece[i]), bool(r.backward[i])) for i in range(r.kind.size)}
    # Pieces 8-9 and 1-8 end, in the file, at samples 8 and 1.
    assert turned == {(n, False) for n in range(2, 8)} | {(8, True), (1, True)}


def loose(gap_um):
    """Return a second root of axon beside the plain axon's tip, 30 um long."""
    y = -60 - gap_um
    return f"20 2 0 {y} 0 0.3 -1\n21 2 0 {y - 30} 0 0.2 20\n"


def test_loose_pieces_are_kept_near_and_dropped_far_by_the_rule(tmp_path):
    kept = read(tmp_path, PLAIN + loose(49.9))
    assert said(kept) == [repaired("1 loose pieces (30 um) kept across gaps", 1, 11)]
    start = int(np.flatnonzero(kept.piece == 20)[0])
    assert kept.bridged[start]
    assert kept.piece[kept.parent[start]] == 3
    assert kept.bridged.sum() == 1
    dropped = read(tmp_path, PLAIN + loose(50.1))
    assert said(dropped) == [
        repaired("1 loose pieces (30 um) too far away, dropped", 1, 11)
    ]
    assert course(dropped) == course(read(tmp_path, PLAIN))


@pytest.mark.parametrize(("z_um", "joined"), [(14.9, True), (15.1, False)])
def test_a_root_within_10_um_of_the_soma_leaves_it(tmp_path, z_um, joined):
    r = read(tmp_path, PLAIN + f"20 3 0 0 {z_um} 0.4 -1\n21 3 0 0 60 0.4 20\n")
    start = int(np.flatnonzero(r.piece == 20)[0])
    assert (r.parent[start] == -1) == joined
    assert r.bridged[start]
    beside = "pieces that begin beside the soma joined to it"
    kept = f"1 loose pieces ({60 - z_um:.0f} um) kept across gaps"
    assert said(r) == [repaired(beside if joined else kept, 1, 11)]


def test_a_root_inside_the_soma_needs_no_repair(tmp_path):
    r = read(tmp_path, PLAIN + "20 3 0 0 3 0.4 -1\n21 3 0 0 60 0.4 20\n")
    assert r.findings == ()
    assert (r.parent[r.piece == 20] == -1).all()


def test_several_roots_are_all_counted(tmp_path):
    pieces = loose(20) + loose(300).replace("20 ", "40 ").replace("21 ", "41 ")
    r = read(tmp_path, PLAIN + pieces.replace(" 20\n41", " 40\n41"))
    assert {(f.text.split(")")[1], f.count) for f in r.findings} == {
        (" kept across gaps", 1),
        (" too far away, dropped", 1),
    }


REFUSED = {
    "cycle": (PLAIN.replace("0.8 1", "0.8 6"), 5, "belongs to a cycle: 4 samples"),
    "own parent": (PLAIN.replace("80 0 1 8", "80 0 1 9"), 10, "belongs to a cycle: 1"),
    "duplicate id": (PLAIN.replace("\n9 4", "\n8 4"), 10, "repeats number 8"),
    "missing parent": (PLAIN.replace("0.6 4", "0.6 44"), 6, "has no parent 44"),
    "text": (PLAIN.replace("20 0 1.5", "20 zero 1.5"), 9, "has 'zero' where a number"),
    "text as id": (PLAIN.replace("\n9 4", "\nnine 4"), 10, "has 'nine' where"),
    "decimal commas": (PLAIN.replace("0.6", "0,6"), 6, "has commas; write decimals"),
    "commas between": (
        PLAIN.replace("1 2 0 0", "1,2,0,0").replace("2 2 0", "2,2,0"),
        3,
        "has commas",
    ),
    "not a number": (PLAIN.replace("0.6", "nan"), 6, "has 'nan', which is not finite"),
    "infinite": (PLAIN.replace(" -60 ", " -inf "), 4, "has '-inf', which is not finite"),
    "overflow": (PLAIN.replace(" -60 ", " 1e999 "), 4, "is not finite"),
    "too few columns": (PLAIN.replace("0.6 4", "0.6"), 6, "has 6 of 7 columns"),
    "half an id": (PLAIN.replace("\n9 4", "\n9.5 4"), 10, "has the number 9.5, which"),
    "half a type": (PLAIN.replace("\n9 4", "\n9 4.5"), 10, "has the type 4.5, which"),
    "half a parent": (PLAIN.replace("0.6 4", "0.6 4.5"), 6, "has the parent 4.5, which"),
    "negative id": (PLAIN.replace("\n9 4", "\n-9 4"), 10, "negative number or type"),
    "negative type": (PLAIN.replace("\n9 4", "\n9 -4"), 10, "negative number or type"),
    "far away": (PLAIN.replace(" -60 ", " 1e9 "), 4, "beyond any brain"),
    "wide": (PLAIN.replace("0.6 4", "1e300 4"), 6, "beyond any brain"),
    "only comments": ("# x\n\n  # y\n", 1, "holds no sample"),
    "empty": ("", 1, "holds no sample"),
    "only glia": ("1 7 0 0 0 1 -1\n", 1, "holds no sample of a neuron"),
    "workbook": (b"PK\x03\x04rest of a zip", 1, "is a spreadsheet or zip archive"),
    "old workbook": (b"\xd0\xcf\x11\xe0\xa1", 1, "is an old spreadsheet"),
    "compressed": (b"\x1f\x8b\x08\x00", 1, "is a compressed file"),
    "UTF-16": (PLAIN.encode("utf-16"), 1, "is UTF-16 text"),
    "binary": (b"1 1 0 0 0 5 -1\n\x00\x01", 1, "is binary"),
    "page of the web": ("<html>\n<body>not found</body>\n", 1, "has 1 of 7 columns"),
}


@pytest.mark.parametrize("case", REFUSED)
def test_refusals_name_file_line_and_reason(tmp_path, case):
    content, line, words = REFUSED[case]
    with pytest.raises(InputError) as caught:
        read(tmp_path, content)
    problem = caught.value.problems[0]
    assert (problem.file, problem.line) == (str(tmp_path / "cell.swc"), line)
    assert words in problem.rule


def test_all_bad_lines_are_reported_at_once(tmp_path):
    text = PLAIN.replace("0.6 4", "x 4").replace("0.3 2", "nan 2").replace("1.5", "1,5")
    with pytest.raises(InputError) as caught:
        read(tmp_path, text)
    assert [p.line for p in caught.value.problems] == [4, 6, 9]


@pytest.mark.parametrize("name", ["absent.swc", "."])
def test_what_is_no_file_is_named(tmp_path, name):
    with pytest.raises(InputError, match="cannot be read"):
        read_reconstruction(tmp_path / name)


def test_a_lone_soma_is_a_cell_with_two_warnings(tmp_path):
    r = read(tmp_path, "1 1 0 0 0 5 -1\n")
    assert r.kind.size == 0
    assert [f.severity for f in r.findings] == ["warning"] * 2
