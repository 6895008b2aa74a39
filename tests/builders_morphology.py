"""SWC files written anew in other samplings, numberings and orders; made-up trees.

A table has the seven columns of SWC as rows (n, 7), parents before children.
"""

import numpy as np

from circuitgen.morphology import build_arbor, read_reconstruction

SOMA = 1

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


def read(tmp_path, content):
    """Read text or bytes as an SWC file."""
    path = tmp_path / "cell.swc"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return read_reconstruction(path)


def said(reconstruction):
    """List the findings without their text."""
    return [(f.severity, f.code, f.count, f.line) for f in reconstruction.findings]


def course(r):
    """Set of pieces by their two ends, kind and radius: what the file means."""
    rows = np.column_stack([r.begin_um, r.position_um, r.kind, r.radius_um])
    return sorted(map(tuple, np.round(rows, 9).tolist()))


def renumbered_rows(rows, number):
    """Write rows of text with new numbers."""
    new = {row[0]: str(number(int(row[0]))) for row in rows} | {"-1": "-1"}
    return "\n".join(" ".join([new[r[0]], *r[1:6], new[r[6]]]) for r in rows) + "\n"


def read_table(path):
    """Return the samples of a well-formed file as rows."""
    return np.loadtxt(path, comments="#", ndmin=2)


def write_table(path, table):
    """Write rows with all their digits."""
    lines = [
        f"{int(r[0])} {int(r[1])} {r[2]!r} {r[3]!r} {r[4]!r} {r[5]!r} {int(r[6])}"
        for r in table.tolist()
    ]
    path.write_text("\n".join(lines) + "\n")
    return path


def _cut(table, parts_of, soma=False):
    """Cut every piece into the equal parts that its length asks for.

    Radii are in proportion; a piece that leaves the soma, or changes kind, has the
    radius at its far end. Pieces of the soma are cut if `soma` says so.
    """
    row_of = {int(row[0]): row for row in table}
    rows, number = [], int(table[:, 0].max())
    for row in table:
        above = row_of.get(int(row[6]))
        if above is None or (above[1] == SOMA == row[1] and not soma):
            rows.append(row)
            continue
        start = above[2:6].copy()
        if above[1] != row[1]:
            start[3] = row[5]
        parts = parts_of(np.linalg.norm(row[2:5] - above[2:5]))
        parent = row[6]
        for k in range(1, parts):
            number += 1
            between = start + (row[2:6] - start) * k / parts
            rows.append(np.array([number, row[1], *between, parent]))
            parent = number
        rows.append(np.array([*row[:6], parent]))
    return np.array(rows)


def resampled(table, step_um):
    """Put samples no farther apart than a step."""
    return _cut(table, lambda length: max(int(np.ceil(length / step_um)), 1))


def halved(table, soma=False):
    """Cut every piece in two."""
    return _cut(table, lambda length: 2, soma)


def straightened(table):
    """Leave out samples on the straight line from their parent to their only child.

    Their radius must be in proportion, too; kinds must be the same.
    """
    children = {}
    for row in table:
        children.setdefault(int(row[6]), []).append(int(row[0]))
    out = {int(row[0]): row.copy() for row in table}
    for number, below in [(int(n), children.get(int(n), [])) for n in table[:, 0]]:
        row = out[number]
        if len(below) != 1 or row[1] == SOMA:
            continue
        above, child = out[int(row[6])], out[below[0]]
        start = above[2:6].copy()
        if above[1] != row[1]:
            start[3] = row[5]
        span = np.linalg.norm(child[2:5] - start[:3])
        part = np.linalg.norm(row[2:5] - start[:3]) / span if span else 2
        between = start + part * (child[2:6] - start)
        if row[1] == child[1] and np.abs(between - row[2:6]).max() < 1e-11:
            child[6] = above[0]
            del out[number]
    return np.array(list(out.values()))


def renumbered(table, rng):
    """Give every sample a new number at random."""
    new = rng.permutation(10 * len(table))[: len(table)] + 1
    number = dict(zip(table[:, 0].tolist(), new.tolist(), strict=True)) | {-1.0: -1}
    out = table.copy()
    out[:, 0] = [number[n] for n in table[:, 0].tolist()]
    out[:, 6] = [number[n] for n in table[:, 6].tolist()]
    return out


def rerooted(table, tip):
    """Root the tree at the sample of a number, as some files have it."""
    out = table.copy()
    row_of = {int(row[0]): i for i, row in enumerate(table)}
    before, here = -1, tip
    while here != -1:
        row = row_of[here]
        out[row, 6] = before
        before, here = here, int(table[row, 6])
    return out


def made_up_tree(rng, *, samples=60, step_um=6.0):
    """Return a table of random walks with branches: soma, axon, basal, apical."""
    rows = [[1, 1, 0, 0, 0, 5, -1]]
    for kind in (2, 3, 4, 3):
        way = rng.normal(size=3)
        place = way / np.linalg.norm(way) * 8
        rows.append([len(rows) + 1, kind, *place, rng.uniform(0.3, 1), 1])
        first = len(rows)
        for _ in range(samples // 4):
            recent = rng.integers(first, len(rows) + 1)
            above = rows[(len(rows) if rng.random() < 0.8 else recent) - 1]
            place = np.array(above[2:5]) + rng.normal(size=3) * step_um / 2
            radius = rng.uniform(0.2, 1)
            rows.append([len(rows) + 1, kind, *place, radius, above[0]])
    return np.array(rows, float)


def arbor_of(path, **changes):
    """Build the arbor of a file by the usual rules."""
    rules = {"upright": "y", "min_spacing_um": 4.0, "ais_um": 40.0, **changes}
    return build_arbor(read_reconstruction(path), **rules)


ALIKE = (
    "start_um", "end_um", "start_radius_um", "end_radius_um", "kind", "parent",
    "initial", "path_um", "path_end_um",
)  # fmt: skip


def check_same_segments(one, other):
    """Segments are the same up to rounding of coordinates of some 1,000 um."""
    assert one.segments_n == other.segments_n
    for name in ALIKE:
        difference = getattr(one, name).astype(float) - getattr(other, name)
        assert np.abs(difference).max() <= 1e-9, name
