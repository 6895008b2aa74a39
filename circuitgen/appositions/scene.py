"""All that the search reads: arbors packed one after another, and cells in place."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from circuitgen.appositions.records import Axons, Placed, Targets
from circuitgen.morphology.arbor import Arbor, Kind

# Bits of the kinds of target; a presynaptic type's mask is a sum of them.
TARGET_BITS = {"soma": 1, "axon_initial_segment": 2, "basal": 4, "apical": 8}
TARGET_NAMES = {bit: name for name, bit in TARGET_BITS.items()}
# Segments that are looked up together (see DEVELOPERS.md).
GROUP_LENGTH = 4
# Radii, in medians of all targets, at which layers of the search are parted.
_LAYER_FACTORS = (2.0, 6.0)
_KIND_BITS = np.zeros(8, np.uint8)
_KIND_BITS[[Kind.SOMA, Kind.BASAL, Kind.APICAL]] = 1, 4, 8


@dataclass(frozen=True)
class Reach:
    """How far each arbor's centre lines go sideways, and their lowest and highest z.

    `thickest_um` is the largest sum of two radii of any arbors.
    """

    side_um: np.ndarray
    lowest_um: np.ndarray
    highest_um: np.ndarray
    thickest_um: float


@dataclass(frozen=True)
class Scene:
    """Cells and their arbors, ready to be searched; positions in micrometres."""

    axons: Axons
    targets: tuple[Targets, ...]
    placed: Placed
    reach: Reach
    max_gap_um: float
    min_spacing_um: float
    autapses: bool
    wrap_um: tuple[float, float]


def target_bits(arbor: Arbor) -> np.ndarray:
    """Return the target bit of every segment, 0 for axon beyond the initial segment."""
    bits = _KIND_BITS[arbor.kind]
    return np.where(arbor.initial, np.uint8(2), bits).astype(np.uint8)


def _packed(arbors: Sequence[Arbor], chosen: Sequence[np.ndarray], field: str):
    parts = [
        getattr(arbor, field)[index] for arbor, index in zip(arbors, chosen, strict=True)
    ]
    return np.ascontiguousarray(np.concatenate(parts), dtype=np.float64)


def _first(chosen: Sequence[np.ndarray]) -> np.ndarray:
    return np.concatenate([[0], np.cumsum([index.size for index in chosen])])


def _segments(chosen: Sequence[np.ndarray]) -> np.ndarray:
    return np.concatenate(chosen).astype(np.int32)


def _radius(arbor: Arbor) -> np.ndarray:
    return np.maximum(arbor.start_radius_um, arbor.end_radius_um)


def _pack_targets(arbors: Sequence[Arbor], low_um: float, high_um: float) -> Targets:
    """Pack the target capsules of all arbors with a radius above low, up to high."""
    bits = [target_bits(arbor) for arbor in arbors]
    chosen = [
        np.flatnonzero(
            (bit > 0) & (_radius(arbor) > low_um) & (_radius(arbor) <= high_um)
        )
        for bit, arbor in zip(bits, arbors, strict=True)
    ]
    return Targets(
        first=_first(chosen),
        start=_packed(arbors, chosen, "start_um"),
        end=_packed(arbors, chosen, "end_um"),
        start_radius=_packed(arbors, chosen, "start_radius_um"),
        end_radius=_packed(arbors, chosen, "end_radius_um"),
        segment=_segments(chosen),
        kind=np.concatenate([b[i] for b, i in zip(bits, chosen, strict=True)]),
    )


def pack_targets(arbors: Sequence[Arbor]) -> tuple[Targets, ...]:
    """Pack targets in layers of like radius.

    A search looks as far as the thickest target of a layer reaches, so the somata and
    the few thick trunks are kept apart from the many thin branches.
    """
    radii = [_radius(arbor)[target_bits(arbor) > 0] for arbor in arbors]
    middle = float(np.median(np.concatenate(radii)))
    limits = [-np.inf, *(middle * factor for factor in _LAYER_FACTORS), np.inf]
    layers = [
        _pack_targets(arbors, low, high)
        for low, high in zip(limits[:-1], limits[1:], strict=True)
    ]
    return tuple(layer for layer in layers if layer.kind.size)


def _groups_of(start: np.ndarray, end: np.ndarray) -> np.ndarray:
    """Cut one arbor's axon into groups of connected segments; return their bounds."""
    if not len(start):
        return np.zeros(0, int)
    broken = np.flatnonzero((start[1:] != end[:-1]).any(axis=1)) + 1
    stretches = np.concatenate([[0], broken, [len(start)]])
    return np.concatenate(
        [
            np.arange(low, high, GROUP_LENGTH)
            for low, high in zip(stretches[:-1], stretches[1:], strict=True)
        ]
    )


def _group_radii(start, end, radius, bounds) -> np.ndarray:
    """Radius of a capsule from a group's first start to its last end that holds it."""
    sizes = np.diff(bounds)
    origin = np.repeat(start[bounds[:-1]], sizes, axis=0)
    chord = np.repeat(end[bounds[1:] - 1], sizes, axis=0) - origin
    square = np.maximum((chord**2).sum(axis=1), 1e-12)
    far = np.zeros(len(start))
    for points in (start, end):
        away = points - origin
        along = np.clip((away * chord).sum(axis=1) / square, 0, 1)
        side = np.linalg.norm(away - along[:, None] * chord, axis=1)
        far = np.maximum(far, side)
    return np.maximum.reduceat(far + radius, bounds[:-1]) if sizes.size else np.zeros(0)


def pack_axons(arbors: Sequence[Arbor]) -> Axons:
    """Pack the axon capsules of all arbors, in groups of connected segments."""
    chosen = [np.flatnonzero(arbor.kind == Kind.AXON) for arbor in arbors]
    first = _first(chosen)
    start, end = _packed(arbors, chosen, "start_um"), _packed(arbors, chosen, "end_um")
    start_radius = _packed(arbors, chosen, "start_radius_um")
    end_radius = _packed(arbors, chosen, "end_radius_um")
    spans = list(zip(first[:-1], first[1:], strict=True))
    begins = [low + _groups_of(start[low:high], end[low:high]) for low, high in spans]
    bounds = np.concatenate([*begins, first[-1:]]).astype(np.int64)
    radius = np.maximum(start_radius, end_radius)
    return Axons(
        first=first,
        start=start,
        end=end,
        start_radius=start_radius,
        end_radius=end_radius,
        segment=_segments(chosen),
        group_first=_first(begins),
        group_bounds=bounds,
        group_start=start[bounds[:-1]],
        group_end=end[bounds[1:] - 1],
        group_radius=_group_radii(start, end, radius, bounds),
    )


def _reach_of(arbors: Sequence[Arbor]) -> Reach:
    """Measure how far the cable of each arbor goes from its soma."""
    ends = [np.concatenate([arbor.start_um, arbor.end_um]) for arbor in arbors]
    return Reach(
        np.array([np.hypot(end[:, 0], end[:, 1]).max() for end in ends]),
        np.array([end[:, 2].min() for end in ends]),
        np.array([end[:, 2].max() for end in ends]),
        2 * max(float(_radius(arbor).max()) for arbor in arbors),
    )


def make_scene(
    arbors: Sequence[Arbor],
    *,
    arbor_index: np.ndarray,
    position_um: np.ndarray,
    azimuth_deg: np.ndarray,
    target_mask: np.ndarray,
    max_gap_um: float,
    min_spacing_um: float,
    autapses: bool = False,
    wrap_um: tuple[float, float] = (0.0, 0.0),
) -> Scene:
    """Put arbors in place for the search.

    Parameters
    ----------
    arbors : sequence of Arbor
        Every one has a soma, so that no arbor is without target.
    arbor_index, azimuth_deg : (n,)
        Reconstruction and turn about z of every cell.
    position_um : (n, 3)
        Soma centres.
    target_mask : (n,)
        Sum of the `TARGET_BITS` that the cell's axon may contact.
    max_gap_um, min_spacing_um, autapses
        The spec's rules of what an apposition is.
    wrap_um : tuple of float
        Periods of the box in x and y; 0 where the edge is open.
    """
    angle = np.deg2rad(np.asarray(azimuth_deg, dtype=np.float64))
    placed = Placed(
        arbor=np.asarray(arbor_index, dtype=np.int64),
        position=np.ascontiguousarray(position_um, dtype=np.float64),
        turn=np.column_stack([np.cos(angle), np.sin(angle)]),
        mask=np.asarray(target_mask, dtype=np.uint8),
    )
    return Scene(
        axons=pack_axons(arbors),
        targets=pack_targets(arbors),
        placed=placed,
        reach=_reach_of(arbors),
        max_gap_um=float(max_gap_um),
        min_spacing_um=float(min_spacing_um),
        autapses=autapses,
        wrap_um=wrap_um,
    )
