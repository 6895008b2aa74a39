"""SWC files written anew in other samplings, numberings and orders; made-up trees.

A table has the seven columns of SWC as rows (n, 7), parents before children.
"""

import numpy as np

from circuitgen.morphology import build_arbor, read_reconstruction

SOMA = 1


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


def _cut(table, parts_of):
    """Cut every piece into the equal parts that its length asks for.

    Radii are in proportion; a piece that leaves the soma, or changes kind, has the
    radius at its far end.
    """
    row_of = {int(row[0]): row for row in table}
    rows, number = [], int(table[:, 0].max())
    for row in table:
        above = row_of.get(int(row[6]))
        if above is None or above[1] == SOMA == row[1]:
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


def halved(table):
    """Cut every piece in two."""
    return _cut(table, lambda length: 2)


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
