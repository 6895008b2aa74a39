"""Recording in a slice: where it lies around a pair, and which sites it keeps.

A slice is upright: it holds the axis from pia to white matter, its faces lie a
thickness apart across a horizontal direction. Slices are cut anywhere and in any
direction, and pairs are patched whose somata both lie within a range of depths below
one face. So around a given pair the direction is uniform, and a direction counts by
the room it leaves: H - |offset along it|, H being the width of the range of depths.
A site is kept if the paths from both somata to it stay between the faces.
"""

from __future__ import annotations

from collections import namedtuple
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from circuitgen.appositions.slice_kernels import count_kept
from circuitgen.core.draws import uniforms
from circuitgen.morphology import Arbor

# Ends of all arbors' segments in the plane, their parents, where each arbor begins.
Paths = namedtuple("Paths", "first start end parent")


@dataclass(frozen=True)
class Slice:
    """Thickness, and the depths below the face at which somata are patched.

    The range of depths has some width; slices are upright.
    """

    thickness_um: float
    soma_low_um: float
    soma_high_um: float

    @property
    def range_um(self) -> float:
        """Width of the range of depths."""
        return self.soma_high_um - self.soma_low_um


def make_paths(arbors: Sequence[Arbor]) -> Paths:
    """Lay the paths of all arbors one after another."""
    counts = [arbor.segments_n for arbor in arbors]
    return Paths(
        first=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        start=np.concatenate([arbor.start_um[:, :2] for arbor in arbors]),
        end=np.concatenate([arbor.end_um[:, :2] for arbor in arbors]),
        parent=np.concatenate([arbor.parent for arbor in arbors]).astype(np.int32),
    )


def pair_weight(lateral_um: np.ndarray, cut: Slice) -> np.ndarray:
    """Return how readily slices hold both somata of a pair, by lateral distance.

    The mean over directions phi of max(0, 1 - r |cos phi| / H); 1 for r = 0.
    """
    ratio = np.asarray(lateral_um, float) / cut.range_um
    with np.errstate(divide="ignore"):
        edge = np.arccos(np.minimum(1.0 / ratio, 1.0))
    open_angle = np.pi / 2 - edge
    return (2 / np.pi) * (open_angle - ratio * (1.0 - np.sin(edge)))


@dataclass(frozen=True)
class Placements:
    """Slices placed around pairs, a few for each.

    Attributes
    ----------
    across : (pairs, placements, 2)
        Unit vector across the slice, away from the face.
    near_um : (pairs, placements)
        Depth of the presynaptic soma below the face.
    weight : (pairs, placements)
        Share of the pair's chance to be patched; a pair's sum is near `pair_weight`.
    """

    across: np.ndarray
    near_um: np.ndarray
    weight: np.ndarray


def place_slices(
    seed: int, cut: Slice, pre, post, offset_um, placements_n: int, row: int = 0
) -> Placements:
    """Place slices around pairs: directions spread evenly from a keyed beginning.

    Parameters
    ----------
    seed : int
        The spec's seed.
    cut : Slice
    pre, post : int (pairs,)
        Cell ids; they and `row` key the draws.
    offset_um : (pairs, 3)
        From the presynaptic soma to the postsynaptic one.
    placements_n : int
        Slices for each pair.
    row : int
        Tells recordings apart.
    """
    index = np.arange(placements_n)
    draws = uniforms(
        seed,
        "slices",
        np.repeat(pre, placements_n),
        np.repeat(post, placements_n),
        row,
        np.tile(index, len(pre)),
    )[:, :2].reshape(len(pre), placements_n, 2)
    # Strata of the circle, one draw in each.
    angle = 2 * np.pi * (index + draws[:, :, 0]) / placements_n
    across = np.stack([np.cos(angle), np.sin(angle)], axis=2)
    apart = np.einsum("ijk,ik->ij", across, offset_um[:, :2])
    room = np.maximum(cut.range_um - np.abs(apart), 0.0)
    shallow = cut.soma_low_um + np.maximum(-apart, 0.0)
    weight = room / cut.range_um / placements_n
    return Placements(across, shallow + draws[:, :, 1] * room, weight)


def kept_sites(
    paths: Paths, cut: Slice, placements: Placements, cells, first, sites, offset_um
) -> np.ndarray:
    """Count the sites of pairs that placed slices keep.

    Parameters
    ----------
    paths : Paths
        From `make_paths`.
    cut : Slice
    placements : Placements
        For these pairs.
    cells : pair of tuples
        For the pre- and the postsynaptic cells: arbor, azimuth in degrees, (pairs,).
    first : int (pairs + 1,)
        Where the sites of each pair begin.
    sites : tuple of arrays (sites,)
        Axon segment and fraction, target segment and fraction.
    offset_um : (pairs, 3)

    Returns
    -------
    int32 (pairs, placements)
    """
    turned = []
    for arbor, azimuth_deg in cells:
        angle = np.deg2rad(azimuth_deg)
        turned.append((np.asarray(arbor), np.cos(angle), np.sin(angle)))
    out = np.zeros(placements.near_um.shape, np.int32)
    count_kept(
        paths,
        *turned,
        np.asarray(first, np.int64),
        tuple(sites),
        placements.across,
        placements.near_um,
        np.ascontiguousarray(offset_um[:, :2]),
        cut.thickness_um,
        out,
    )
    return out
