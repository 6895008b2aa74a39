"""How many pairs of two types a protocol could sample, touching or not."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy.spatial import cKDTree

from circuitgen.appositions import pair_weight
from circuitgen.run.circuit import Circuit, soma_offsets
from circuitgen.run.protocol import Protocol

_PAIRS_AT_ONCE = 2_000_000
# Slices placed around the pairs of a row: some ten thousand in all.
_PLACEMENTS_WANTED = 20_000
_MOST_PLACEMENTS = 16


class PairCounter:
    """Counts all ordered pairs of different cells of two types under a protocol."""

    def __init__(self, circuit: Circuit):
        self._circuit = circuit
        self._trees: dict[tuple[int, bool], cKDTree] = {}

    def _tree(self, cell_type: int, lateral: bool) -> cKDTree:
        key, wrap = (cell_type, lateral), self._circuit.wrap_um
        if key not in self._trees:
            cells = self._circuit.cells
            points = cells.position_um[cells.type_index == cell_type]
            size = 2 if lateral else 3
            box = None
            if wrap[0] > 0:
                box = np.array([*wrap, 0.0])[:size]
                points = points.copy()
                points[:, :2] %= wrap
                # A tiny negative number comes out of the division as the period.
                points[:, :2][points[:, :2] >= wrap] = 0.0
            self._trees[key] = cKDTree(points[:, :size], boxsize=box)
        return self._trees[key]

    def count(self, pre: int, post: int, protocol: Protocol) -> float:
        """Return the pairs of two types; in a slice weighed by their chance there."""
        if protocol.cut is not None:
            return self._weight(pre, post, protocol)
        a = self._tree(pre, protocol.lateral)
        b = self._tree(post, protocol.lateral)
        low_um, high_um = protocol.low_um, protocol.high_um
        if np.isfinite(high_um):
            total = int(a.count_neighbors(b, high_um))
        else:
            total = a.n * b.n
        if low_um > 0:
            return total - int(a.count_neighbors(b, np.nextafter(low_um, 0.0)))
        return total - (a.n if pre == post else 0)

    def sources(self, pre_type: int) -> np.ndarray:
        """Return the presynaptic cells of a type."""
        return np.flatnonzero(self._circuit.cells.type_index == pre_type)

    def _weight(self, pre: int, post: int, protocol: Protocol) -> float:
        sources = self.sources(pre)
        targets = np.flatnonzero(self._circuit.cells.type_index == post)
        total, step = 0.0, max(_PAIRS_AT_ONCE // max(targets.size, 1), 1)
        for begin in range(0, sources.size, step):
            some = sources[begin : begin + step]
            a, b = np.repeat(some, targets.size), np.tile(targets, some.size)
            offsets = soma_offsets(self._circuit, a, b)
            lateral = np.linalg.norm(offsets[:, :2], axis=1)
            distance = lateral if protocol.lateral else np.linalg.norm(offsets, axis=1)
            chosen = protocol.holds(distance) & (a != b)
            total += float(pair_weight(lateral[chosen], protocol.cut).sum())
        return total

    def with_placements(self, protocol: Protocol) -> Protocol:
        """Return a protocol with as many slices around each pair as its row needs."""
        if protocol.cut is None:
            return protocol
        total = sum(
            self.count(pre, post, protocol)
            for pre in protocol.pre_types
            for post in protocol.post_types
        )
        wanted = np.ceil(_PLACEMENTS_WANTED / max(total, 1.0))
        return replace(protocol, placements_n=int(np.clip(wanted, 1, _MOST_PLACEMENTS)))
