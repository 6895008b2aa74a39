"""Candidate sites on disk, one file for every block of presynaptic cells."""

from __future__ import annotations

from dataclasses import fields
from pathlib import Path

import numpy as np

from circuitgen.appositions import (
    Appositions,
    TargetIndex,
    find_appositions,
    index_targets,
    reachable_cells,
)
from circuitgen.core.files import whole_file
from circuitgen.core.progress import Progress
from circuitgen.run.circuit import Circuit, block_bounds

# Axon segments in one block: some hundred cells, a few hundred megabytes of sites.
AXON_SEGMENTS_PER_BLOCK = 3_000_000
# Targets sorted at once, at 45 bytes each.
MOST_TARGETS_IN_INDEX = 60_000_000
_NAMES = tuple(field.name for field in fields(Appositions))


class SiteStore:
    """The candidate sites of a circuit, found block by block and kept until drawn.

    Sites are kept rather than found again because each takes twenty bytes, and a
    second search would take as long as the first.
    """

    def __init__(self, circuit: Circuit, folder: Path):
        self._circuit, self._folder = circuit, folder
        self.bounds = block_bounds(circuit, AXON_SEGMENTS_PER_BLOCK)

    def path(self, block: int) -> Path:
        """Return the file of a block."""
        return self._folder / f"sites-{block:05d}.npz"

    def find_all(self, threads: int | None) -> None:
        """Search every block that an earlier try has not finished."""
        index = None
        with Progress("finding appositions", self._circuit.cells.cells_n) as progress:
            for block, (low, high) in enumerate(self.bounds):
                if self.path(block).exists():
                    progress.advance(high - low, resumed=True)
                    continue
                pre_cells = np.arange(low, high)
                index = self._index_for(pre_cells, index)
                found = find_appositions(index, pre_cells, threads)
                with whole_file(self.path(block)) as partial, partial.open("wb") as out:
                    np.savez(out, **{name: getattr(found, name) for name in _NAMES})
                progress.advance(high - low)

    def _index_for(self, pre_cells, last: TargetIndex | None) -> TargetIndex:
        """Index the targets that a block may reach, or use the last index again.

        Sorting targets anew for every block costs more than a few idle ones in the
        index, so all cells are indexed at once while they fit.
        """
        scene = self._circuit.scene
        everyone = np.arange(self._circuit.cells.cells_n)
        if self._targets_n(everyone) <= MOST_TARGETS_IN_INDEX:
            return last or index_targets(scene, everyone)
        near = reachable_cells(scene, pre_cells)
        if last is not None and np.isin(near, last.cells).all():
            return last
        return index_targets(scene, near)

    def _targets_n(self, cells: np.ndarray) -> int:
        scene = self._circuit.scene
        counts = sum(np.diff(layer.first) for layer in scene.targets)
        return int(counts[scene.placed.arbor[cells]].sum())

    def load(self, block: int) -> Appositions:
        """Read the sites of a block."""
        with np.load(self.path(block)) as stored:
            return Appositions(**{name: stored[name] for name in _NAMES})

    def pairs_of(self, block: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Read (pre, post, appositions) of the pairs of a block, without the sites."""
        with np.load(self.path(block)) as stored:
            return stored["pre"], stored["post"], np.diff(stored["first"])
