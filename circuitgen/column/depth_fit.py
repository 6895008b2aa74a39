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


def _fitting(
    profiles: Sequence[Profile],
    z_um: np.ndarray,
    thickness_um: float,
    first_layer_um: float,
) -> np.ndarray:
    """Tell which profiles fit which soma, shape (somata, profiles)."""
    outside = np.column_stack(
        [sum(one.outside_um(z_um, thickness_um)) for one in profiles]
    )
    cable = np.array([one.cable_um for one in profiles])
    share = outside / np.where(cable > 0, cable, 1.0)
    fits = share <= share.min(axis=1, keepdims=True) + TOLERATED_SHARE
    tops = np.array([one.apical_top_um for one in profiles])
    # How deep the apical top lies below the pia; comparisons with NaN are False.
    drop = thickness_um - (z_um[:, None] + tops)
    reaches = fits & (drop >= 0) & (drop <= first_layer_um)
    least = np.where(reaches, drop, np.inf).min(axis=1, keepdims=True)
    reaches &= drop <= least + TOLERATED_DROP_UM
    return np.where(reaches.any(axis=1, keepdims=True), reaches, fits)


def choose_profiles(
    profiles: Sequence[Profile],
    z_um: np.ndarray,
    draws: np.ndarray,
    *,
    thickness_um: float,
    first_layer_um: float,
) -> np.ndarray:
    """Choose a reconstruction of one cell type for every soma.

    First those fit whose share of cable outside the cortex is within
    `TOLERATED_SHARE` of the least. If the apical dendrite of some of them ends within
    the first layer, an apical tuft belongs there: only these fit, and of them those
    within `TOLERATED_DROP_UM` of the highest. Each that fits is equally likely.

    Parameters
    ----------
    profiles : sequence of Profile
        The type's reconstructions.
    z_um, draws : (n,)
        Height of every soma, and its uniform draw in [0, 1).
    thickness_um, first_layer_um : float
        Thickness of the cortex and of its first layer.

    Returns
    -------
    ndarray of int64, shape (n,)
    """
    fits = _fitting(profiles, z_um, thickness_um, first_layer_um)
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
