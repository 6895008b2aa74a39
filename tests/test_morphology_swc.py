"""SWC files as they are found: accepted as they are, repaired and said so, or refused.

Format: the public specification of SWC 1.0 (seven columns: number, type, x, y, z,
radius, parent).
"""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from circuitgen.core.errors import InputError
from circuitgen.morphology import Kind, Reconstruction, read_reconstruction

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
        PLAIN.replace("10 0 0.4", "10 0 0"),
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
    assert set(KINDS) == set(r.kind.tolist())
    assert sorted(r.kind.tolist())[: len(KINDS)] == sorted(KINDS)[: len(KINDS)] or (
        case == "doubled points"
    )
    assert (r.radius_um > 0).all()
