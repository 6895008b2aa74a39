"""A finished run as slices would show it: its own synapses, on uncut paths or not."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyarrow.compute as pc
import pyarrow.dataset as pa_dataset

from circuitgen.core.errors import CircuitgenError
from circuitgen.run import (
    PairCounter,
    Protocol,
    ReopenedCircuit,
    SliceLoss,
    soma_offsets,
)

_COLUMNS = ["pre_cell_id", "post_cell_id", "pre_segment", "pre_fraction"]
_COLUMNS += ["post_segment", "post_fraction"]


class SliceView:
    """Counts connections of a run that slices placed around its pairs would show."""

    def __init__(self, folder: Path):
        self._folder = Path(folder)
        try:
            self._circuit = ReopenedCircuit(folder)
        except CircuitgenError:
            # The reconstructions are not where they were: no path can be followed.
            self._circuit = None
            return
        self._counter, self._loss = PairCounter(self._circuit), SliceLoss(self._circuit)

    def counts(self, protocol: Protocol) -> tuple[float, float] | None:
        """Return (connected, pairs) under a slice, pairs by their chance there."""
        if self._circuit is None:
            return None
        protocol = self._counter.with_placements(protocol)
        pairs = sum(
            self._counter.count(a, b, protocol)
            for a in protocol.pre_types
            for b in protocol.post_types
        )
        pre, post, first, sites = self._synapses(protocol)
        if not pre.size:
            return 0.0, pairs
        offsets = soma_offsets(self._circuit, pre, post)
        kept, weight = self._loss.placed(protocol, pre, post, offsets, first, sites)
        return float(((kept > 0) * weight).sum()), pairs

    def _synapses(self, protocol: Protocol):
        """Return pairs in the window, where their synapses begin, and their sites."""
        cells = self._circuit.cells
        ids = np.flatnonzero(np.isin(cells.type_index, protocol.pre_types))
        field = pc.field("pre_cell_id")
        near = (field >= int(ids[0])) & (field <= int(ids[-1]))
        stored = pa_dataset.dataset(self._folder / "synapses.parquet")
        frame = stored.to_table(_COLUMNS, filter=near).to_pandas()
        pre, post = frame.pre_cell_id.to_numpy(), frame.post_cell_id.to_numpy()
        offsets = soma_offsets(self._circuit, pre, post)
        offsets = offsets[:, :2] if protocol.lateral else offsets
        chosen = protocol.holds(np.linalg.norm(offsets, axis=1)) & (pre != post)
        chosen &= np.isin(cells.type_index[pre], protocol.pre_types)
        chosen &= np.isin(cells.type_index[post], protocol.post_types)
        frame, pre, post = frame[chosen], pre[chosen], post[chosen]
        axon = self._places(pre, frame.pre_segment, frame.pre_fraction)
        target = self._places(post, frame.post_segment, frame.post_fraction)
        new = np.ones(pre.size, bool)
        new[1:] = (np.diff(pre) != 0) | (np.diff(post) != 0)
        first = np.append(np.flatnonzero(new), pre.size)
        return pre[new], post[new], first, (*axon, *target)

    def _places(self, cells: np.ndarray, number, fraction):
        """Return segments and fractions of places given by SWC samples."""
        segment = np.zeros(cells.size, np.int64)
        along = np.zeros(cells.size)
        arbors = self._circuit.cells.arbor_index[cells]
        for arbor in np.unique(arbors):
            rows = np.flatnonzero(arbors == arbor)
            segment[rows], along[rows] = self._circuit.arbors[arbor].place_on_segment(
                number.to_numpy()[rows], fraction.to_numpy(float)[rows]
            )
        return segment, along
