"""Numbers that describe one reconstruction, taken from the arbor that a build uses."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.morphology.arbor import Arbor, Kind


@dataclass(frozen=True)
class Measures:
    """Size of an arbor in micrometres; the course inside the soma is not counted.

    `extent_um` is along the file's x, y and z. `radius_um` is median, least and
    largest radius of the neurites, weighted by length for the median. Values of an
    arbor without neurites are 0.
    """

    axon_um: float
    basal_um: float
    apical_um: float
    extent_um: tuple[float, float, float]
    axon_tips_n: int
    dendrite_tips_n: int
    branch_points_n: int
    longest_axon_path_um: float
    longest_dendrite_path_um: float
    radius_um: tuple[float, float, float]
    soma_radius_um: float

    @property
    def dendrite_um(self) -> float:
        """Length of basal and apical dendrites."""
        return self.basal_um + self.apical_um


def is_tip(arbor: Arbor) -> np.ndarray:
    """Tell which segments of neurites nothing continues, shape (n,)."""
    has_child = np.zeros(arbor.segments_n, bool)
    has_child[arbor.parent[arbor.parent >= 0]] = True
    return (arbor.kind != Kind.SOMA) & ~has_child


def measure(arbor: Arbor) -> Measures:
    """Measure an arbor that was built with its file's own axes."""
    length, kind = arbor.length_um, arbor.kind
    axon, neurite, tip = kind == Kind.AXON, kind != Kind.SOMA, is_tip(arbor)
    children = arbor.parent[neurite & (arbor.parent >= 0)]
    ends = np.vstack([arbor.start_um, arbor.end_um])
    return Measures(
        axon_um=float(length[axon].sum()),
        basal_um=float(length[kind == Kind.BASAL].sum()),
        apical_um=float(length[kind == Kind.APICAL].sum()),
        extent_um=tuple(np.ptp(ends, axis=0).tolist()),
        axon_tips_n=int((tip & axon).sum()),
        dendrite_tips_n=int((tip & ~axon).sum()),
        branch_points_n=int((np.bincount(children, minlength=1) > 1).sum()),
        longest_axon_path_um=float(arbor.path_end_um[axon].max(initial=0.0)),
        longest_dendrite_path_um=float(
            arbor.path_end_um[neurite & ~axon].max(initial=0.0)
        ),
        radius_um=_radii(arbor, length, neurite),
        soma_radius_um=arbor.soma_radius_um,
    )


def _radii(arbor: Arbor, length: np.ndarray, neurite: np.ndarray):
    if not neurite.any():
        return 0.0, 0.0, 0.0
    radius = arbor.end_radius_um[neurite]
    order = np.argsort(radius, kind="stable")
    reached = np.cumsum(length[neurite][order])
    middle = order[np.searchsorted(reached, reached[-1] / 2)]
    return float(radius[middle]), float(radius.min()), float(radius.max())
