"""The samples of a file, and how a tree of them is turned round."""

from __future__ import annotations

from dataclasses import dataclass, fields, replace

import numpy as np

from circuitgen.morphology.trees import order_from_roots


@dataclass(frozen=True)
class Samples:
    """n samples of one SWC file, parents before children.

    Attributes
    ----------
    number : int64 (n,)
        As in the file.
    kind : int64 (n,)
        SWC type.
    position_um : float64 (n, 3)
        Centre.
    radius_um : float64 (n,)
        Radius.
    parent : int64 (n,)
        Index of the parent, -1 for a root.
    begin_um : float64 (n, 3)
        Where the piece that ends at the sample begins: at the parent, or at the point
        of the soma or of other cable to which the sample was joined.
    bridged : bool (n,)
        True where that piece is a gap: path runs across it, cable does not.
    line : int64 (n,)
        Line of the file, from 1.
    piece : int64 (n,)
        Number of the sample that ends, in the file, the piece before this sample.
    backward : bool (n,)
        True where the file runs that piece the other way.
    """

    number: np.ndarray
    kind: np.ndarray
    position_um: np.ndarray
    radius_um: np.ndarray
    parent: np.ndarray
    begin_um: np.ndarray
    bridged: np.ndarray
    line: np.ndarray
    piece: np.ndarray
    backward: np.ndarray

    @property
    def length_um(self) -> np.ndarray:
        """Length from `begin_um` to the sample, gaps included, shape (n,)."""
        return np.linalg.norm(self.position_um - self.begin_um, axis=1)

    def taken(self, rows: np.ndarray) -> Samples:
        """Return the samples in `rows`, in that order; orphans become roots."""
        rank = np.full(self.kind.size + 1, -1)
        rank[rows] = np.arange(rows.size)
        columns = {field.name: getattr(self, field.name)[rows] for field in fields(self)}
        columns["parent"] = parent = rank[columns["parent"]]
        root = (parent < 0)[:, None]
        columns["begin_um"] = np.where(root, columns["position_um"], columns["begin_um"])
        return Samples(**columns)

    def rooted_at(self, row: int) -> Samples:
        """Root the tree of a sample at it; samples may then stand before parents."""
        parent, begin = self.parent.copy(), self.begin_um.copy()
        piece, backward = self.piece.copy(), self.backward.copy()
        here, above = row, int(self.parent[row])
        while above >= 0:
            parent[above], begin[above] = here, self.position_um[here]
            piece[above], backward[above] = self.piece[here], not self.backward[here]
            here, above = above, int(self.parent[above])
        parent[row], begin[row] = -1, self.position_um[row]
        piece[row], backward[row] = self.number[row], False
        return replace(
            self, parent=parent, begin_um=begin, piece=piece, backward=backward
        )

    def ordered(self) -> Samples:
        """Return the samples with parents before children."""
        return self.taken(order_from_roots(self.parent))
