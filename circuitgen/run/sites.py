"""Candidate sites on disk, one file for every block of postsynaptic cells."""

from __future__ import annotations

import os
from dataclasses import fields
from pathlib import Path

import numpy as np

from circuitgen.appositions import Appositions, find_appositions
from circuitgen.core.files import whole_file
from circuitgen.core.progress import Progress
from circuitgen.run.circuit import Circuit, block_bounds

# Targets in one block: about a thousand cells, a few hundred megabytes while searching.
TARGETS_PER_BLOCK = 1_500_000
_NAMES = tuple(field.name for field in fields(Appositions))


class SiteStore:
    """The candidate sites of a circuit, found block by block and kept until drawn.

    Sites are kept rather than found again because each takes twenty bytes, and a
    second search would take as long as the first.
    """

    def __init__(self, circuit: Circuit, folder: Path, most_targets=TARGETS_PER_BLOCK):
        self._circuit, self._folder = circuit, folder
        self.bounds = block_bounds(circuit, most_targets)

    def path(self, block: int) -> Path:
        """Return the file of a block."""
        return self._folder / f"sites-{block:05d}.npz"

    def find_all(self, threads: int | None) -> None:
        """Search every block that an earlier try has not finished."""
        threads = threads or os.cpu_count() or 1
        cells_n = self._circuit.cells.cells_n
        with Progress("finding appositions", cells_n) as progress:
            for block, (low, high) in enumerate(self.bounds):
                if self.path(block).exists():
                    progress.advance(high - low, resumed=True)
                    continue
                found = find_appositions(
                    self._circuit.scene, np.arange(low, high), threads
                )
                with whole_file(self.path(block)) as partial, partial.open("wb") as out:
                    np.savez(out, **{name: getattr(found, name) for name in _NAMES})
                progress.advance(high - low)

    def load(self, block: int) -> Appositions:
        """Read the sites of a block."""
        with np.load(self.path(block)) as stored:
            return Appositions(**{name: stored[name] for name in _NAMES})

    def pairs(self):
        """Yield (pre, post, appositions) of each block, without the sites."""
        for block in range(len(self.bounds)):
            with np.load(self.path(block)) as stored:
                yield stored["pre"], stored["post"], np.diff(stored["first"])
