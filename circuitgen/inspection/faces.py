"""A cut face: many tips that end on one plane with no cable beyond it.

Statistic. Where an arbor is cut, all branches that crossed the plane end on it. The
candidates are the faces of the convex hull of all tips, and the six directions of the
file's axes: beyond a hull's face there is no tip, as there is none beyond a slice face.
For each candidate k tips lie within a slab under the plane, of n within ten slabs. If
tips thinned out evenly or toward the outside, as they do where branches end by
themselves, each of the n would lie in the slab with a chance of at most 1/10, so that
P(K >= k) of the binomial law bounds the chance from above. The tips that put the plane
in place (three of a face of the hull, one along an axis) count neither in k nor in n.

Thresholds. P < 1e-5, for about 100 candidates and three slabs: fewer than 3 false
alarms in 1,000 files. The tips must cover at least six slabs in both directions of
the plane (root mean square), since a tuft on a small spot is no face. Slabs of 1, 2
and 4 um: a traced tip on a slice face is off it by about the depth of focus or the
distance of samples (common practice, not measured here).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.spatial import ConvexHull, QhullError
from scipy.stats import binom

from circuitgen.inspection.measures import is_tip
from circuitgen.morphology.arbor import Arbor, Kind

SLABS_UM = (1.0, 2.0, 4.0)
SLABS_N = 10
LARGEST_CHANCE = 1e-5
LEAST_WIDTH_SLABS = 6.0


@dataclass(frozen=True)
class Face:
    """A plane on which tips end.

    `normal` points outward along the file's axes; `distance_um` counts from the soma;
    `tips_n` of `near_n` tips within ten slabs lie within `slab_um` of it;
    `missing_um` is the cable that lies farther out on the opposite side.
    """

    normal: tuple[float, float, float]
    distance_um: float
    slab_um: float
    tips_n: int
    axon_tips_n: int
    near_n: int
    chance: float
    missing_um: float


def _candidates(tips: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return outward normals (m, 3), and how many tips put each plane in place."""
    axes = np.vstack([np.eye(3), -np.eye(3)])
    try:
        faces = np.unique(np.round(ConvexHull(tips).equations[:, :3], 6), axis=0)
    except QhullError:  # all tips in one plane
        faces = np.zeros((0, 3))
    placing = np.repeat([3, 1], [len(faces), len(axes)])
    return np.vstack([faces, axes]), placing


def _is_wide(tips: np.ndarray, slab_um: float) -> bool:
    spread = np.sqrt(np.maximum(np.linalg.eigvalsh(np.cov(tips.T)), 0.0))
    return bool(spread[1] >= LEAST_WIDTH_SLABS * slab_um)


def find_face(arbor: Arbor) -> Face | None:
    """Return the clearest cut face of an arbor, or None."""
    tip = is_tip(arbor)
    tips = arbor.end_um[tip]
    if len(tips) < 4:
        return None
    normals, placing = _candidates(tips)
    neurite = arbor.kind != Kind.SOMA
    reach = (arbor.end_um[neurite] @ normals.T).max(axis=0)
    below = reach - tips @ normals.T
    best, least = None, LARGEST_CHANCE
    for slab_um in SLABS_UM:
        inside = below <= slab_um
        k = np.maximum(inside.sum(axis=0) - placing, 0)
        n = np.maximum((below <= slab_um * SLABS_N).sum(axis=0) - placing, 0)
        chance = binom.sf(k - 1, n, 1.0 / SLABS_N)
        for i in np.flatnonzero(chance < LARGEST_CHANCE).tolist():
            if chance[i] < least and _is_wide(tips[inside[:, i]], slab_um):
                best, least = (i, slab_um), chance[i]
    if best is None:
        return None
    i, slab_um = best
    on_face = below[:, i] <= slab_um
    return Face(
        normal=tuple(normals[i].tolist()),
        distance_um=float(reach[i]),
        slab_um=slab_um,
        tips_n=int(on_face.sum()),
        axon_tips_n=int((on_face & (arbor.kind[tip] == Kind.AXON)).sum()),
        near_n=int((below[:, i] <= slab_um * SLABS_N).sum()),
        chance=float(least),
        missing_um=_beyond_um(arbor, -normals[i], float(reach[i])),
    )


def _beyond_um(arbor: Arbor, direction: np.ndarray, distance_um: float) -> float:
    """Length of cable farther from the soma than a distance, along a direction."""
    neurite = arbor.kind != Kind.SOMA
    start, end = (place[neurite] @ direction for place in (arbor.start_um, arbor.end_um))
    low, high = np.minimum(start, end), np.maximum(start, end)
    span = high - low
    share = np.where(high > distance_um, 1.0, 0.0)
    part = np.clip((high - distance_um) / np.where(span > 0, span, 1.0), 0.0, 1.0)
    share = np.where(span > 0, part, share)
    return float((arbor.length_um[neurite] * share).sum())
