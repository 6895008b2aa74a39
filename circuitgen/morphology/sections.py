"""Sections of a reconstruction in an order that does not depend on the file.

A section runs between soma, branch points, changes of kind and tips. Sections come
depth first, so that neighbours in space are neighbours in memory, children in order of
kind and of the place where they end.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.morphology.arbor import Kind
from circuitgen.morphology.reconstruction import Reconstruction
from circuitgen.morphology.trees import depth_of, nearest_stop

# Places that differ by less are the same place when children are put in order.
_ORDER_DIGITS = 6


@dataclass(frozen=True)
class Sections:
    """k sections of n rows of a reconstruction.

    Attributes
    ----------
    rows : int (n,)
        Rows of the reconstruction, section after section, outward in each.
    first : int (k,)
        Index in `rows` of the first row of every section.
    section : int (n,)
        Section of every index of `rows`.
    above : int (k,)
        Row from which a section leaves, -1 for the soma's roots.
    place : int (rows of the reconstruction,)
        Index in `rows` of every row.
    """

    rows: np.ndarray
    first: np.ndarray
    section: np.ndarray
    above: np.ndarray
    place: np.ndarray


def _heads(r: Reconstruction) -> np.ndarray:
    """Tell which rows begin a section."""
    child = (r.parent >= 0) & ~r.bridged
    is_soma = r.kind == Kind.SOMA
    # What leaves the soma, and what is joined across a gap, breaks no section.
    counted = child & (is_soma | ~is_soma[r.parent])
    children = np.bincount(r.parent[counted], minlength=r.kind.size)
    return ~child | (children[r.parent] != 1) | (r.kind[r.parent] != r.kind)


def _middle(r: Reconstruction, head: np.ndarray) -> np.ndarray:
    """Return the mean place of every section, at its head's row."""
    length = np.linalg.norm(r.position_um - r.begin_um, axis=1)
    total = np.bincount(head, weights=length, minlength=head.size)
    middle = (r.position_um + r.begin_um) / 2
    sums = [np.bincount(head, length * axis, head.size) for axis in middle.T]
    return np.column_stack(sums) / np.where(total > 0, total, 1.0)[:, None]


def _below(r: Reconstruction, head: np.ndarray, ends: np.ndarray):
    """Return the heads below every head in order, -1 for the soma; and guests.

    Guests are heads that hang on cable across a gap.
    """
    starts = np.flatnonzero(head == np.arange(head.size))
    place = np.hstack([r.position_um[ends], _middle(r, head)])[starts]
    place = np.round(place, _ORDER_DIGITS) + 0.0
    ranked = starts[np.lexsort((*place.T[::-1], r.kind[starts]))]
    is_soma = r.kind == Kind.SOMA
    below: dict[int, list[int]] = {}
    guests = []
    for start in ranked.tolist():
        above = int(r.parent[start])
        if above < 0 or (is_soma[above] and not is_soma[start]):
            below.setdefault(-1, []).append(start)
        elif r.bridged[start]:
            guests.append(start)
        else:
            below.setdefault(int(head[above]), []).append(start)
    return below, guests


def _outward(r: Reconstruction, head: np.ndarray, ends: np.ndarray) -> list[int]:
    """Order the heads of sections: depth first, then what hangs on gaps."""
    below, guests = _below(r, head, ends)
    order, known = [], set()
    pending = below.get(-1, [])[::-1]
    while pending or guests:
        if not pending:
            ready = (i for i, g in enumerate(guests) if head[r.parent[g]] in known)
            pending.append(guests.pop(next(ready)))
        order.append(pending.pop())
        known.add(order[-1])
        pending += below.get(order[-1], [])[::-1]
    return order


def sections_of(r: Reconstruction) -> Sections:
    """Find the sections of a reconstruction."""
    head = nearest_stop(r.parent, _heads(r))
    depth = depth_of(r.parent)
    ends = np.zeros(head.size, np.int64)
    by_depth = np.argsort(depth, kind="stable")
    ends[head[by_depth]] = by_depth
    order = np.array(_outward(r, head, ends), dtype=np.int64)
    rank = np.zeros(head.size, np.int64)
    rank[order] = np.arange(order.size)
    rows = np.lexsort((depth, rank[head]))
    place = np.zeros(rows.size, np.int64)
    place[rows] = np.arange(rows.size)
    section = rank[head[rows]]
    first = np.flatnonzero(np.diff(section, prepend=-1))
    return Sections(rows, first, section, r.parent[order], place)
