"""Cells in place: how many, where, which reconstruction, which way round."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from circuitgen.column.cells import Cells
from circuitgen.column.packing import SATURATION, Packing, PackingError
from circuitgen.column.volume import Volume, make_volume
from circuitgen.core.draws import uniforms
from circuitgen.core.errors import InputError, Problem
from circuitgen.morphology import Arbor, Kind
from circuitgen.spec import Spec

# Of a type with apical dendrites, reconstructions whose top stays below the pia come
# first. Those whose share of cable outside the cortex is within FIT_SHARE of the least
# fit equally well, but only the ones whose apical top is within FIT_TOP_UM of the
# highest are used: a tuft belongs in the upper layers.
FIT_SHARE = 0.02
FIT_TOP_UM = 30.0
_TILE_UM = 100.0
_UM3_PER_MM3 = 1e9


@dataclass(frozen=True)
class Placement:
    """Cells in place and what a modeller should know about them.

    Attributes
    ----------
    cells : Cells
        The cells, in order of id.
    counts : int array (types, layers)
        Cells of each type in each layer.
    outside_share : float array (types,)
        Share of the type's cable above the pia or below the white-matter boundary.
    warnings : tuple of str
        In plain words.
    """

    cells: Cells
    counts: np.ndarray
    outside_share: np.ndarray
    warnings: tuple[str, ...]


def cell_counts(spec: Spec, volume: Volume) -> np.ndarray:
    """Return the number of cells by type and layer, shape (types, layers).

    A count stands as it is; a density times the layer's volume inside the shape is
    rounded to the nearest whole number, halves up.
    """
    counts = np.zeros((len(spec.cell_types), len(spec.layers)), dtype=np.int64)
    sizes = [volume.slab_volume_um3(low, high) for low, high in spec.layer_bounds_um]
    for row, cell_type in enumerate(spec.cell_types):
        for column, layer in enumerate(spec.layers):
            density = cell_type.density_per_mm3.get(layer.name, 0.0)
            by_density = np.floor(density * sizes[column] / _UM3_PER_MM3 + 0.5)
            counts[row, column] = cell_type.count.get(layer.name, int(by_density))
    return counts


def _radii(spec: Spec, arbors: Sequence[Sequence[Arbor]]) -> np.ndarray:
    return np.array(
        [
            cell_type.soma_radius_um or max(arbor.soma_radius_um for arbor in own)
            for cell_type, own in zip(spec.cell_types, arbors, strict=True)
        ]
    )


def _check_room(spec: Spec, volume: Volume, counts, radii) -> None:
    """Refuse layers that cannot hold their somata."""
    problems = []
    filled = counts * (4 / 3 * np.pi * radii**3)[:, None]
    for column, (low, high) in enumerate(spec.layer_bounds_um):
        size = volume.slab_volume_um3(low, high)
        share = filled[:, column].sum() / size if size > 0 else 0.0
        name = spec.layers[column].name
        if size <= 0 and counts[:, column].any():
            rule = "does not lie inside the column's shape but is to hold cells"
            problems.append(Problem(str(spec.path), None, f"layers.{name}", rule))
        if share > SATURATION:
            rule = (
                f"cannot hold its {counts[:, column].sum()} somata: they would fill"
                f" {share:.0%} of it, and random packing ends near {SATURATION:.0%}"
            )
            problems.append(Problem(str(spec.path), None, f"layers.{name}", rule))
    if problems:
        raise InputError(problems)


def _place_somata(spec: Spec, volume: Volume, counts, radii):
    """Return type, layer and position of every soma, type by type."""
    packing = Packing(volume, float(radii.max()))
    types, layers, positions = [], [], []
    for row, cell_type in enumerate(spec.cell_types):
        for column, layer in enumerate(spec.layers):
            n = int(counts[row, column])
            low, high = spec.layer_bounds_um[column]
            key = (spec.seed, f"place {cell_type.name} in {layer.name}")
            try:
                positions.append(packing.place(n, float(radii[row]), low, high, key))
            except PackingError:
                place = f"cell_types.{cell_type.name}"
                rule = f"finds no free place for its somata in {layer.name}: too dense"
                problem = Problem(str(spec.path), None, place, rule)
                raise InputError([problem]) from None
            types.append(np.full(n, row))
            layers.append(np.full(n, column))
    return np.concatenate(types), np.concatenate(layers), np.concatenate(positions)


def _interleaved(number: np.ndarray) -> np.ndarray:
    """Spread the lowest 16 bits of whole numbers to the even bits."""
    out = np.zeros_like(number)
    for bit in range(16):
        out |= ((number >> bit) & 1) << (2 * bit)
    return out


def _order(types: np.ndarray, position: np.ndarray, low_um: np.ndarray) -> np.ndarray:
    """Order cells by type, tile by tile along a Z-curve (Morton 1966), by depth.

    Tiles begin at the volume's lowest corner: other cells cannot move them.
    """
    tile = np.floor((position[:, :2] - low_um[:2]) / _TILE_UM).astype(np.int64)
    curve = _interleaved(tile[:, 0]) | (_interleaved(tile[:, 1]) << 1)
    x, y, z = position.T
    return np.lexsort([y, x, -z, curve, types])


def _outside_shares(arbor: Arbor, height: np.ndarray, thickness: float) -> np.ndarray:
    """Share of an arbor's cable outside the cortex, for somata at the given heights."""
    middle = (arbor.start_um[:, 2] + arbor.end_um[:, 2]) / 2
    order = np.argsort(middle, kind="stable")
    cable = np.concatenate([[0.0], np.cumsum(arbor.length_um[order])])
    total = cable[-1] or 1.0
    ranked = middle[order]
    below = cable[np.searchsorted(ranked, -height, side="left")]
    above = total - cable[np.searchsorted(ranked, thickness - height, side="right")]
    return (below + above) / total


def _tops(arbor: Arbor) -> float:
    """Highest point of the apical dendrite above the soma; -inf without one."""
    apical = arbor.kind == Kind.APICAL
    return float(arbor.end_um[apical, 2].max()) if apical.any() else -np.inf


def _choose_arbors(own: Sequence[Arbor], height, thickness, draws):
    """Choose a reconstruction for each soma; return (choice, share outside)."""
    outside = np.column_stack([_outside_shares(a, height, thickness) for a in own])
    tops = np.array([_tops(arbor) for arbor in own])
    below = tops[None, :] + height[:, None] <= thickness
    below |= ~below.any(axis=1, keepdims=True)
    least = np.where(below, outside, np.inf).min(axis=1, keepdims=True)
    fits = below & (outside <= least + FIT_SHARE)
    if np.isfinite(tops).any():
        reach = np.where(fits, tops, -np.inf)
        fits &= reach >= reach.max(axis=1, keepdims=True) - FIT_TOP_UM
    rank = np.cumsum(fits, axis=1)
    wanted = np.floor(draws * rank[:, -1]) + 1
    choice = (rank >= wanted[:, None]).argmax(axis=1)
    return choice, outside[np.arange(choice.size), choice]


def _wrap_warnings(spec: Spec, volume: Volume, arbors) -> list[str]:
    widths = [width for width in volume.wrap_um if width > 0]
    if not widths:
        return []
    warnings = []
    for cell_type, own in zip(spec.cell_types, arbors, strict=True):
        span = max(float(np.ptp(arbor.end_um[:, :2], axis=0).max()) for arbor in own)
        if span > min(widths):
            warnings.append(
                f"{cell_type.name}: an arbor {span:.0f} um wide meets itself in a"
                f" periodic box of {min(widths):g} um; a pair may touch more than once"
                " around the box"
            )
    return warnings


def place_cells(spec: Spec, arbors: Sequence[Sequence[Arbor]]) -> Placement:
    """Place all cells of a spec.

    Parameters
    ----------
    spec : Spec
        The checked spec.
    arbors : sequence of sequences of Arbor
        Reconstructions of each cell type, in the spec's order. `Cells.arbor_index`
        counts through all of them, type after type.

    Raises
    ------
    InputError
        When a layer cannot hold its somata.
    """
    volume = make_volume(spec)
    counts, radii = cell_counts(spec, volume), _radii(spec, arbors)
    _check_room(spec, volume, counts, radii)
    types, layers, position = _place_somata(spec, volume, counts, radii)
    order = _order(types, position, volume.low_um)
    types, layers, position = types[order], layers[order], position[order]
    draws = uniforms(spec.seed, "turn and reconstruction", np.arange(types.size))
    arbor_index = np.zeros(types.size, np.int32)
    outside = np.zeros(len(spec.cell_types))
    first = 0
    for row, own in enumerate(arbors):
        mine = types == row
        if mine.any():
            choice, share = _choose_arbors(
                own, position[mine, 2], spec.thickness_um, draws[mine, 1]
            )
            arbor_index[mine], outside[row] = first + choice, share.mean()
        first += len(own)
    cells = Cells(
        type_index=types.astype(np.int32),
        layer_index=layers.astype(np.int32),
        arbor_index=arbor_index,
        position_um=position,
        azimuth_deg=draws[:, 0] * 360.0,
    )
    return Placement(cells, counts, outside, tuple(_wrap_warnings(spec, volume, arbors)))
