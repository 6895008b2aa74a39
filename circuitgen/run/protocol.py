"""Which ordered pairs of cells a recording samples, and how readily."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.appositions import Slice
from circuitgen.run.circuit import Circuit
from circuitgen.spec import Recording

# Pathways without a recording of their own report their probability for somata within
# this distance: common practice in paired recordings.
REFERENCE_HIGH_UM = 100.0
# Somata said to lie at one depth are taken to lie within this range about it.
_LEAST_RANGE_UM = 1.0


@dataclass(frozen=True)
class Protocol:
    """Which ordered pairs of cells a recording samples; distances in micrometres.

    `cut` is the slice, None for pairs in the whole circuit; around each pair so many
    slices are placed, in draws keyed by `row`.
    """

    pre_types: tuple[int, ...]
    post_types: tuple[int, ...]
    low_um: float
    high_um: float
    lateral: bool
    cut: Slice | None = None
    row: int = 0
    placements_n: int = 1

    def holds(self, distance_um: np.ndarray) -> np.ndarray:
        """Tell which distances lie in the window."""
        return (distance_um >= self.low_um) & (distance_um <= self.high_um)

    def pathways(self, types_n: int) -> np.ndarray:
        """Return the numbers of the pathways that it pools, increasing."""
        pre, post = np.meshgrid(self.pre_types, self.post_types, indexing="ij")
        return np.sort((pre * types_n + post).reshape(-1))


def slice_of(recording: Recording) -> Slice | None:
    """Return the slice of a recording, None where it has none.

    Without depths of the somata they may lie anywhere in the slice.
    """
    thickness = recording.slice_thickness_um
    if thickness is None:
        return None
    low, high = recording.soma_depth_low_um, recording.soma_depth_high_um
    if low is None:
        return Slice(thickness, 0.0, thickness)
    missing = max(_LEAST_RANGE_UM - (high - low), 0.0)
    return Slice(thickness, low - missing / 2, high + missing / 2)


def protocol_of(circuit: Circuit, recording: Recording) -> Protocol:
    """Return the protocol of a recording."""
    low, high = recording.window_um()
    return Protocol(
        circuit.spec.members(recording.pre_type),
        circuit.spec.members(recording.post_type),
        low,
        high,
        recording.distance_kind == "lateral",
        slice_of(recording),
        recording.row,
    )


def within(circuit: Circuit, high_um: float) -> Protocol:
    """Return the protocol of all pairs of different cells within a distance."""
    everyone = tuple(range(len(circuit.spec.cell_types)))
    return Protocol(everyone, everyone, 0.0, high_um, False)
