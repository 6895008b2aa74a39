"""A pathway as a slice would show it: cells sampled, their appositions found again."""

from __future__ import annotations

import numpy as np

from circuitgen.appositions import find_appositions, index_targets
from circuitgen.column import Cells
from circuitgen.core.draws import uniforms
from circuitgen.run import (
    PairBlock,
    PairCounter,
    Protocol,
    ReopenedCircuit,
    SliceLoss,
    Tally,
)

# Presynaptic cells that stand for all of their type: their appositions are found in
# seconds, and a share from so many cells' pairs is known far better than the law.
_PRE_CELLS = 60


class _Sample:
    """A few presynaptic cells of one type and all cells of another."""

    def __init__(self, circuit: ReopenedCircuit, protocol: Protocol):
        self.spec, self.arbors, self.wrap_um = (
            circuit.spec,
            circuit.arbors,
            circuit.wrap_um,
        )
        types = circuit.cells.type_index
        [pre_type], [post_type] = protocol.pre_types, protocol.post_types
        candidates = np.flatnonzero(types == pre_type)
        draws = uniforms(circuit.spec.seed, "slice sample", candidates)[:, 0]
        pre = np.sort(candidates[np.argsort(draws)[:_PRE_CELLS]])
        chosen = np.union1d(pre, np.flatnonzero(types == post_type))
        cells = circuit.cells
        self.cells = Cells(
            *(
                getattr(cells, name)[chosen]
                for name in (
                    "type_index",
                    "layer_index",
                    "arbor_index",
                    "position_um",
                    "azimuth_deg",
                )
            )
        )
        self.pre = np.searchsorted(chosen, pre)
        self.scene = circuit.scene(
            self.cells.arbor_index, self.cells.position_um, self.cells.azimuth_deg
        )

    def pathway(self, pre, post) -> np.ndarray:
        """Return pathway numbers; pairs from cells that only receive get none."""
        types = self.cells.type_index
        code = types[pre].astype(np.int64) * len(self.spec.cell_types) + types[post]
        return np.where(np.isin(pre, self.pre), code, -1)


def slice_histogram(circuit: ReopenedCircuit, protocol: Protocol) -> np.ndarray:
    """Return pairs by appositions and by those lost in the slice, (a, lost).

    Parameters
    ----------
    circuit : ReopenedCircuit
    protocol : Protocol
        Of one pathway in the numbers of the circuit's spec, with its slice.
    """
    sample = _Sample(circuit, protocol)
    counter = _SampleCounter(sample)
    protocol = counter.with_placements(protocol)
    index = index_targets(sample.scene, np.arange(sample.cells.cells_n))
    sites = find_appositions(index, sample.pre)
    block = PairBlock(sample, sites.pre, sites.post, sites.count)
    tally = Tally(sample, protocol)
    SliceLoss(sample).lose(block, sites, tally)
    [histogram] = tally.histograms(counter).values()
    return histogram


class _SampleCounter(PairCounter):
    """Counts pairs from the sampled cells alone."""

    def __init__(self, sample: _Sample):
        super().__init__(sample)
        self._pre = sample.pre

    def sources(self, pre_type: int) -> np.ndarray:
        """Return the sampled presynaptic cells."""
        return self._pre
