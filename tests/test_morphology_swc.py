"""The text of SWC files as they are found: accepted as it is, or refused and why.

Format: the public specification of SWC 1.0 (seven columns: number, type, x, y, z,
radius, parent).
"""

import time

import numpy as np
import pytest
from builders_morphology import PLAIN, ROWS, course, read, renumbered_rows, said

from circuitgen.core.errors import InputError
from circuitgen.morphology import Kind, read_reconstruction, write_swc


def test_the_plain_file_is_read_as_written(tmp_path):
    r = read(tmp_path, PLAIN)
    assert r.findings == ()
    assert r.name == "cell"
    assert r.number.tolist() == [1, 2, 3, 4, 5, 6, 7, 8, 9]
    assert r.kind.tolist() == [1, 2, 2, 3, 3, 3, 3, 4, 4]
    assert r.parent.tolist() == [-1, 0, 1, 0, 3, 4, 4, 0, 7]
    assert r.radius_um.tolist() == [5, 0.5, 0.3, 0.8, 0.6, 0.4, 0.4, 1.5, 1]
    assert r.soma_center_um.tolist() == [0, 0, 0]
    # By hand, soma edges included: 10 + 50 + 10 + 20 + 2 sqrt(20^2 + 10^2) + 20 + 60.
    assert r.cable_length_um == pytest.approx(170 + 2 * np.sqrt(500))


def test_arrays_of_a_reconstruction_are_read_only(tmp_path):
    r = read(tmp_path, PLAIN)
    arrays = [value for value in vars(r).values() if isinstance(value, np.ndarray)]
    assert len(arrays) == 10
    assert not any(array.flags.writeable for array in arrays)


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
    "hash comments": "#\n##id,type\n  # x\n#1 1 0 0 0 5 -1\n" + PLAIN,
    "other comments": "; a\n% b\n// c\n/* d\n * e */\n-- f\n! g\n'h'\n" + PLAIN,
    "comments between": PLAIN.replace("\n4 3", "\n# x\n; y\n4 3"),
    "comments at line ends": PLAIN.replace("\n", " # note\n"),
    "comments that touch": PLAIN.replace("0.6 4", "0.6 4#note"),
    "more columns": PLAIN.replace("\n", " 7 x\n").replace("cell 7 x", "cell"),
    "more columns here and there": PLAIN.replace("0.6 4", "0.6 4 9 9"),
    "numbers with points": renumbered_rows(ROWS, lambda n: f"{n}.0"),
    "scientific notation": PLAIN.replace(" -60 ", " -6.0e1 ").replace(" 80 ", " 8E+01 "),
    "plus signs": PLAIN.replace(" 80 ", " +80 "),
    "bare points": PLAIN.replace("0.6 4", ".6 4").replace(" 80 ", " 80. "),
    "from 0": renumbered_rows(ROWS, lambda n: n - 1),
    "from 300000": renumbered_rows(ROWS, lambda n: n + 299_999),
    "beyond 1e8": renumbered_rows(ROWS, lambda n: n + 10**12),
    "gaps": renumbered_rows(ROWS, lambda n: 17 * n),
    "ids unsorted": renumbered_rows(ROWS, lambda n: 7 * n % 11),
    "children before parents": renumbered_rows(ROWS[::-1], lambda n: n),
    "rows shuffled": renumbered_rows(
        [ROWS[i] for i in (4, 8, 0, 2, 6, 1, 3, 5, 7)], int
    ),
}


@pytest.mark.parametrize("case", SAME_CELL)
def test_other_spellings_of_the_plain_file_give_the_same_cell(tmp_path, case):
    r = read(tmp_path, SAME_CELL[case])
    assert said(r) == []
    assert course(r) == course(read(tmp_path, PLAIN))
    assert r.cable_length_um == pytest.approx(170 + 2 * np.sqrt(500))


MENDED = {
    "roots marked 0": (PLAIN.replace("5 -1", "5 0"), ("root_mark", 1, 2)),
    "roots marked -2": (PLAIN.replace("5 -1", "5 -2"), ("root_mark", 1, 2)),
    "titles": ("id type x y z\nMade in 2019\n" + PLAIN, ("title", 2, 1)),
    "titles with commas": ("id,type,x,y,z,r,p\n" + PLAIN, ("title", 1, 1)),
}


@pytest.mark.parametrize("case", MENDED)
def test_what_is_unambiguous_is_mended_and_said(tmp_path, case):
    content, (code, count, line) = MENDED[case]
    r = read(tmp_path, content)
    assert said(r) == [("repair", code, count, line)]
    assert course(r) == course(read(tmp_path, PLAIN))
    assert "connectivity is the same" in r.findings[0].text


def test_a_parent_0_is_a_parent_where_there_is_a_sample_0(tmp_path):
    r = read(tmp_path, "0 1 0 0 0 5 -1\n1 2 0 -20 0 1 0\n2 3 0 20 0 2 0\n")
    assert said(r) == []
    assert r.parent.tolist() == [-1, 0, 0]


REFUSED = {
    "cycle": (PLAIN.replace("0.8 1", "0.8 6"), 5, "a cycle of 3 samples: 4, 6, 5"),
    "own parent": (PLAIN.replace("80 0 1 8", "80 0 1 9"), 10, "has itself, 9, as its"),
    "duplicate id": (PLAIN.replace("\n9 4", "\n8 4"), 10, "the number 8 of line 9"),
    "missing parent": (PLAIN.replace("0.6 4", "0.6 44"), 6, "the parent 44, which is"),
    "text": (PLAIN.replace("20 0 1.5", "20 zero 1.5"), 9, "has 'zero' where a number"),
    "text as id": (PLAIN.replace("\n9 4", "\nnine 4"), 10, "has 'nine' where"),
    "text as first id": ("one 1 0 0 0 5 -1\n", 1, "has 'one' where a number belongs"),
    "underscores": (PLAIN.replace(" -60 ", " -6_0 "), 4, "has '-6_0' where a number"),
    "other digits": (PLAIN.replace(" -60 ", " -\u0666\u0660 "), 4, "where a number"),
    "hexadecimal": (PLAIN.replace(" -60 ", " 0x10 "), 4, "has '0x10' where a number"),
    "decimal commas": (PLAIN.replace("0.6", "0,6"), 6, "has decimal commas; write"),
    "commas between": (PLAIN.replace(" ", ","), 2, "has commas; separate columns"),
    "commas and blanks": (PLAIN.replace(" ", ", "), 2, "has commas; separate columns"),
    "semicolons": (PLAIN.replace(" ", ";"), 2, "has semicolons; separate columns"),
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
    "cable beyond any neuron": (PLAIN.replace(" -60 ", " 2e7 "), 2, "beyond any neuron"),
    "only comments": ("# x\n\n  # y\n", 1, "holds no sample"),
    "only titles": ("Dear reader,\nthis is no cell\n", 1, "holds no sample"),
    "empty": ("", 1, "holds no sample"),
    "only glia": ("1 7 0 0 0 1 -1\n", 1, "holds no sample of a neuron"),
    "workbook": (b"PK\x03\x04rest of a zip", 1, "is a spreadsheet or zip archive"),
    "old workbook": (b"\xd0\xcf\x11\xe0\xa1", 1, "is an old spreadsheet"),
    "compressed": (b"\x1f\x8b\x08\x00", 1, "is a compressed file"),
    "UTF-16": (PLAIN.encode("utf-16"), 1, "is UTF-16 text"),
    "binary": (b"1 1 0 0 0 5 -1\n\x00\x01", 1, "is binary"),
    "XML": ("\n<?xml version='1.0'?>\n<neuron/>\n", 1, "is XML or a page of the web"),
    "page of the web": ("<html>\n<body>not found</body>\n", 1, "is XML or a page"),
}


@pytest.mark.parametrize("case", REFUSED)
def test_refusals_name_file_line_and_reason(tmp_path, case):
    content, line, words = REFUSED[case]
    with pytest.raises(InputError) as caught:
        read(tmp_path, content)
    problem = caught.value.problems[0]
    assert (problem.file, problem.line) == (str(tmp_path / "cell.swc"), line)
    assert words in problem.rule


def test_all_problems_are_reported_at_once(tmp_path):
    """Two bad lines with numbers that can be read; orphan; cycle; repeated number."""
    text = PLAIN.replace("0.6 4", "x 4").replace("0.3 2", "nan 2")
    text += "10 3 0 0 30 1 77\n11 3 0 0 40 1 12\n12 3 0 0 50 1 11\n9 3 0 0 60 1 1\n"
    with pytest.raises(InputError) as caught:
        read(tmp_path, text)
    assert [p.line for p in caught.value.problems] == [4, 6, 11, 12, 14]


def test_children_of_a_line_that_cannot_be_read_are_no_orphans(tmp_path):
    for spoilt in (PLAIN.replace("0.6 4", "x 4"), PLAIN.replace("\n5 3", "\nfive 3")):
        with pytest.raises(InputError) as caught:
            read(tmp_path, spoilt)
        assert [p.line for p in caught.value.problems] == [6]


def test_many_problems_are_counted_beyond_a_hundred(tmp_path):
    with pytest.raises(InputError) as caught:
        read(tmp_path, "1 1 0 0 0 5 -1\n" + "2 3 0 x 0 1 1\n" * 250)
    problems = caught.value.problems
    assert [p.line for p in problems[:100]] == list(range(2, 102))
    assert [p.rule for p in problems[100:]] == ["has 150 problems more"]


@pytest.mark.parametrize("name", ["absent.swc", "."])
def test_what_is_no_file_is_named(tmp_path, name):
    with pytest.raises(InputError, match="cannot be read"):
        read_reconstruction(tmp_path / name)


def test_large_files_are_read_in_well_under_a_second(tmp_path):
    """100,000 samples: a zigzag of axon, in order and shuffled; best of three."""
    n = 100_000
    place = [f"{i // 3} {i % 2} 0.125 0.25" for i in range(n)]
    rows = [f"{i + 1} 2 {place[i]} {i or -1}" for i in range(n)]
    shuffled = [rows[i] for i in np.random.default_rng(1).permutation(n)]
    for text in ("\n".join(rows), "# head\n" + "\n".join(shuffled)):
        path = tmp_path / "large.swc"
        path.write_text(text)
        times = []
        for _ in range(3):
            begin = time.perf_counter()
            assert read_reconstruction(path).number.size == n
            times.append(time.perf_counter() - begin)
        assert min(times) < 0.9


class TestWriting:
    def test_a_written_reconstruction_is_read_as_the_same_cell(self, tmp_path):
        r = read(tmp_path, PLAIN)
        write_swc(tmp_path / "copy.swc", header=["one", "", "two"], **r.as_samples())
        text = (tmp_path / "copy.swc").read_text()
        assert text.startswith("# one\n#\n# two\n1 1 0 0 0 5 -1\n2 2 0 -10 0 0.5 1\n")
        assert text.partition("-1\n")[2] == PLAIN.partition("-1\n")[2]
        copy = read_reconstruction(tmp_path / "copy.swc")
        assert course(copy) == course(r)
        assert said(copy) == []

    def test_numbers_are_compact_and_rounded_to_a_thousandth(self, tmp_path):
        write_swc(
            tmp_path / "a.swc",
            header=[],
            kind=np.array([Kind.SOMA, Kind.AXON], np.int8),
            position_um=np.array([[-0.0, 1e-9, 100.0], [-1e-4, 1 / 3, -12.5]]),
            radius_um=np.array([10.0, 0.1]),
            parent=np.array([-1, 0]),
        )
        lines = (tmp_path / "a.swc").read_text()
        assert lines == "1 1 0 0 100 10 -1\n2 2 0 0.333 -12.5 0.1 1\n"

    def test_gaps_stay_gaps_and_are_joined_again(self, tmp_path):
        text = PLAIN + "20 2 0 -80 0 0.3 -1\n21 2 0 -99 0 0.2 20\n"
        r = read(tmp_path, text)
        write_swc(tmp_path / "copy.swc", header=[], **r.as_samples())
        copy = read_reconstruction(tmp_path / "copy.swc")
        assert [(f.code, f.count) for f in copy.findings] == [("loose_kept", 1)]
        assert course(copy) == course(r)
        assert copy.bridged.tolist() == r.bridged.tolist()
