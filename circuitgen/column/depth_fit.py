"""Which reconstruction suits a depth: as little cable outside the cortex as can be."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from circuitgen.morphology.arbor import Arbor, Kind

# A reconstruction fits if it leaves at most this share of its cable more outside the
# cortex than the best one does.
TOLERATED_SHARE = 0.01
# Apical tops this close to the highest count as equally high.
TOLERATED_DROP_UM = 50.0


@dataclass(frozen=True)
class Profile:
    """Where the cable of one arbor lies above and below its soma.

    Attributes
    ----------
    height_um : float64 (n,)
        Middle of every segment of axon or dendrite, increasing.
    below_um : float64 (n + 1,)
        Length of the lowest 0, 1, ..., n segments.
    apical_top_um : float
        Highest point of the apical dendrite; NaN without one.
    """

    height_um: np.ndarray
    below_um: np.ndarray
    apical_top_um: float

    @property
    def cable_um(self) -> float:
        """Length of all axon and dendrite."""
        return float(self.below_um[-1])

    def outside_um(
        self, z_um: np.ndarray, thickness_um: float
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return the lengths above the pia and below the cortex for somata at z (n,).

        A segment counts as a whole where its middle lies; it is never longer than the
        spacing at which arbors are cut.
        """
        above = np.searchsorted(self.height_um, thickness_um - z_um, side="right")
        below = np.searchsorted(self.height_um, -z_um, side="left")
        return self.cable_um - self.below_um[above], self.below_um[below]


def profile_of(arbor: Arbor) -> Profile:
    """Measure the cable of an arbor by height."""
    cable = arbor.kind != Kind.SOMA
    height = (arbor.start_um[cable, 2] + arbor.end_um[cable, 2]) / 2
    order = np.argsort(height, kind="stable")
    lengths = arbor.length_um[cable][order]
    apical = arbor.kind == Kind.APICAL
    tops = np.maximum(arbor.start_um[apical, 2], arbor.end_um[apical, 2])
    return Profile(
        height[order],
        np.concatenate([[0.0], np.cumsum(lengths)]),
        float(tops.max()) if tops.size else np.nan,
    )


def _tops_um(profiles: Sequence[Profile]) -> np.ndarray:
    return np.array([one.apical_top_um for one in profiles])


def has_tuft(
    profiles: Sequence[Profile], layer_top_depth_um: float, first_layer_um: float
) -> bool:
    """Tell whether a type's apical dendrites are meant to end in the first layer.

    They are if the middle one of them, with its soma at the top of its layer, would
    get there.
    """
    tops = _tops_um(profiles)
    tops = tops[~np.isnan(tops)]
    return bool(tops.size) and np.median(tops) >= layer_top_depth_um - first_layer_um


def _fitting(
    profiles: Sequence[Profile], z_um: np.ndarray, thickness_um: float
) -> np.ndarray:
    """Tell which profiles leave little cable outside, shape (somata, profiles)."""
    outside = np.column_stack(
        [sum(one.outside_um(z_um, thickness_um)) for one in profiles]
    )
    cable = np.array([one.cable_um for one in profiles])
    share = outside / np.where(cable > 0, cable, 1.0)
    return share <= share.min(axis=1, keepdims=True) + TOLERATED_SHARE


def _highest(fits: np.ndarray, drop_um: np.ndarray) -> np.ndarray:
    """Narrow a choice to apical tops just below the pia, where there are any."""
    # Comparisons with NaN, no apical dendrite, are False.
    below = fits & (drop_um >= 0)
    least = np.where(below, drop_um, np.inf).min(axis=1, keepdims=True)
    near = below & (drop_um <= least + TOLERATED_DROP_UM)
    return np.where(near.any(axis=1, keepdims=True), near, fits)


def choose_profiles(
    profiles: Sequence[Profile],
    z_um: np.ndarray,
    draws: np.ndarray,
    *,
    thickness_um: float,
    is_tufted: bool,
) -> np.ndarray:
    """Choose a reconstruction of one cell type for every soma.

    Those fit whose share of cable outside the cortex is within `TOLERATED_SHARE` of
    the least. For a type with a tuft in the first layer only those of them fit whose
    apical top lies below the pia, within `TOLERATED_DROP_UM` of the highest such top:
    a trunk too short for the depth would leave the tuft too deep. Each that fits is
    equally likely.

    Parameters
    ----------
    profiles : sequence of Profile
        The type's reconstructions.
    z_um, draws : (n,)
        Height of every soma, and its uniform draw in [0, 1).
    thickness_um : float
        Thickness of the cortex.
    is_tufted : bool
        From `has_tuft`.

    Returns
    -------
    ndarray of int64, shape (n,)
    """
    fits = _fitting(profiles, z_um, thickness_um)
    if is_tufted:
        fits = _highest(fits, thickness_um - (z_um[:, None] + _tops_um(profiles)))
    fitting_n = fits.sum(axis=1)
    wanted = np.minimum((draws * fitting_n).astype(np.int64), fitting_n - 1)
    rank = np.cumsum(fits, axis=1) - 1
    return np.argmax(fits & (rank == wanted[:, None]), axis=1)


def width_um(arbor: Arbor) -> float:
    """Return the widest extent of an arbor seen from the pia, in micrometres.

    It is measured along 36 directions, which misses at most 0.1 % of it.
    """
    angle = np.deg2rad(np.arange(0.0, 180.0, 5.0))
    ends = np.concatenate([arbor.start_um, arbor.end_um])[:, :2]
    along = ends @ np.array([np.cos(angle), np.sin(angle)])
    return float(np.ptp(along, axis=0).max())
