"""Any bytes as an SWC file: a reconstruction that can be built on, or a refusal."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from circuitgen.core.errors import InputError
from circuitgen.morphology import build_arbor, read_reconstruction

ROWS = [
    "1 1 0 0 0 5 -1",
    "2 2 0 -10 0 0.5 1",
    "3 2 0 -60 0 0.3 2",
    "4 3 10 0 0 0.8 1",
    "5 3 30 0 0 0.6 4",
    "6 3 50 10 0 0.4 5",
    "7 4 50 -10 0 0.4 5",
    "8 1 0 5 0 5 1",
    "9 2 0 80 0 1 -1",
]
WORDS = ["0", "1", "2", "3", "4", "5", "7", "9", "-1", "-0.5", "1e9", "nan", "x", "#"]
WORDS += ["", "1,5", "5 5", "1_0", "٣", "1e400", "99999999999999999999", "0x1", "\n"]
WORDS += ["\x1c", "\N{LINE SEPARATOR}", "\N{NO-BREAK SPACE}", "5\r5"]


def problems_or_reconstruction(path):
    try:
        return read_reconstruction(path)
    except InputError as error:
        return error.problems


def check_read_or_refused(tmp_path_factory, content):
    path = tmp_path_factory.getbasetemp() / "junk.swc"
    path.write_bytes(content)
    r = problems_or_reconstruction(path)
    if isinstance(r, tuple):
        assert r
        assert all(p.file == str(path) and p.line and p.rule for p in r)
        return
    assert np.isfinite(r.position_um).all()
    assert (r.radius_um > 0).all()
    assert np.isin(r.kind, [1, 2, 3, 4]).all()
    assert (r.kind == 1).any()
    assert ((r.parent >= 0) | (r.kind == 1)).all()
    assert (r.parent < np.arange(r.parent.size)).all()
    if r.cable_length_um < 1e4:
        arbor = build_arbor(r, upright="y", min_spacing_um=4.0, ais_um=40.0)
        assert np.isfinite(arbor.start_um).all()
        assert np.isfinite(arbor.end_um).all()
        assert (arbor.path_end_um >= arbor.path_um).all()


SPOIL = st.tuples(st.integers(0, 8), st.integers(0, 6), st.sampled_from(WORDS))


@settings(max_examples=400, deadline=None)
@given(st.lists(SPOIL, max_size=4))
def test_files_with_spoilt_fields_are_read_or_refused(tmp_path_factory, spoils):
    rows = [row.split() for row in ROWS]
    for row, column, word in spoils:
        rows[row][column] = word
    text = "\n".join(map(" ".join, rows))
    check_read_or_refused(tmp_path_factory, text.encode())


# A parent of a lower number, 0 for a root, is never in a cycle.
DOWNWARD = st.tuples(*(st.integers(0, n) for n in range(9)))
KINDS = st.tuples(*[st.sampled_from([1, 2, 3, 4, 0, 6, 7, 9])] * 9)


@settings(max_examples=300, deadline=None)
@given(KINDS, DOWNWARD, st.permutations(range(1, 10)))
def test_trees_of_any_kinds_and_shape_are_read(tmp_path_factory, kinds, parents, order):
    number = {old: str(new) for old, new in zip(range(1, 10), order, strict=True)}
    number[0] = "0"
    rows = [row.split() for row in ROWS]
    for row, kind, parent in zip(rows, kinds, parents, strict=True):
        row[0], row[1], row[6] = number[int(row[0])], str(kind), number[parent]
    path = tmp_path_factory.getbasetemp() / "junk.swc"
    path.write_text("\n".join(map(" ".join, rows)))
    r = problems_or_reconstruction(path)
    assert isinstance(r, tuple) == (set(kinds) == {7})
    check_read_or_refused(tmp_path_factory, path.read_bytes())


TEXTS = st.text("0123456789 .-+e\n#\t", max_size=200).map(str.encode)


@settings(max_examples=200, deadline=None)
@given(st.binary(max_size=200) | TEXTS)
def test_any_bytes_are_read_or_refused(tmp_path_factory, content):
    check_read_or_refused(tmp_path_factory, content)
