"""Cells in place: how many, where, which reconstruction, turned how far."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from circuitgen.column.cells import Cells
from circuitgen.column.depth_fit import (
    Profile,
    choose_profiles,
    has_tuft,
    profile_of,
    width_um,
)
from circuitgen.column.order import order_in_space
from circuitgen.column.packing import SATURATION, Packing, Slab
from circuitgen.column.problems import spec_problem
from circuitgen.column.volume import Volume, make_volume
from circuitgen.core.draws import uniforms
from circuitgen.core.errors import InputError, Problem
from circuitgen.morphology.arbor import Arbor
from circuitgen.spec import Spec

_UM3_PER_MM3 = 1e9
_MOST_CELLS = 10**8
# More of a type's cable than this outside the cortex is worth a word.
_WORTH_WARNING = 0.10


@dataclass(frozen=True)
class Placement:
    """Placed cells, and what a user should know about them.

    Attributes
    ----------
    cells : Cells
        The cells, in order of cell id; `arbor_index` counts through the arbors of all
        types, one type after another.
    volume : Volume
        Where they are; also has the periods of wrapped edges.
    cells_n : int64 (types, layers)
        Number of cells of every type in every layer.
    layer_volume_um3 : float64 (layers,)
        Volume of each layer within the shape.
    soma_share : float64 (layers,)
        Share of each layer's volume that its somata fill.
    above_share, below_share : float64 (types,)
        Share of a type's cable above the pia and below the cortex; 0 without cells.
    warnings : tuple of str
        One sentence each; empty when all is well.
    """

    cells: Cells
    volume: Volume
    cells_n: np.ndarray
    layer_volume_um3: np.ndarray
    soma_share: np.ndarray
    above_share: np.ndarray
    below_share: np.ndarray
    warnings: tuple[str, ...]


def _slabs(spec: Spec, volume: Volume) -> list[Slab]:
    return [Slab(volume, low, high) for low, high in spec.layer_bounds_um]


def _wanted(spec: Spec, layer_volume_um3: np.ndarray) -> np.ndarray:
    """Return the number of cells by type and layer, shape (types, layers).

    A density stands for density times volume, rounded to the nearest whole number
    and a half rounded up.
    """
    out = np.zeros((len(spec.cell_types), len(spec.layers)), np.int64)
    for row, cell_type in enumerate(spec.cell_types):
        for column, layer in enumerate(spec.layers):
            per_um3 = cell_type.density_per_mm3.get(layer.name, 0.0) / _UM3_PER_MM3
            by_density = math.floor(per_um3 * layer_volume_um3[column] + 0.5)
            out[row, column] = cell_type.count.get(layer.name, by_density)
    return out


def _soma_radii(spec: Spec, arbors_by_type: Sequence[Sequence[Arbor]]) -> np.ndarray:
    """Return each type's soma radius: the spec's, or its largest reconstruction's."""
    return np.array(
        [
            cell_type.soma_radius_um or max(arbor.soma_radius_um for arbor in arbors)
            for cell_type, arbors in zip(spec.cell_types, arbors_by_type, strict=True)
        ]
    )


def _soma_share(wanted, radius_um, layer_volume_um3) -> np.ndarray:
    soma_um3 = 4 / 3 * np.pi * radius_um**3
    filled = soma_um3 @ wanted
    room = np.where(layer_volume_um3 > 0, layer_volume_um3, np.inf)
    return filled / room


def _number_problems(spec: Spec, wanted, layer_volume_um3) -> Iterator[Problem]:
    """Yield cells wanted where there is no room at all, and numbers out of reach."""
    if wanted.sum() > _MOST_CELLS:
        rule = f"ask for {wanted.sum():,} cells; {_MOST_CELLS:,} are the most"
        yield spec_problem(spec, ("cell_types",), rule)
    if wanted.sum() == 0:
        rule = "give no cell at all: every density times volume rounds to 0"
        yield spec_problem(spec, ("cell_types",), rule)
    for row, column in np.argwhere(wanted > 0):
        if layer_volume_um3[column] <= 0:
            name, layer = spec.cell_types[row].name, spec.layers[column].name
            rule = f"wants cells, but {spec.column.file} has no part in this layer"
            yield spec_problem(spec, ("cell_types", name, "count", layer), rule)


def _packing_problems(spec: Spec, wanted, radius_um, soma_share) -> Iterator[Problem]:
    """Yield layers too full of somata, and somata wider than a wrapped box."""
    for column, layer in enumerate(spec.layers):
        if soma_share[column] > SATURATION:
            spent = wanted[:, column] * radius_um**3
            worst = int(spent.argmax())
            rule = (
                f"({layer.name}) would be {soma_share[column]:.1%} soma; randomly "
                f"placed spheres fill at most {SATURATION:.1%}. Lower densities or "
                f"radii; most is {spec.cell_types[worst].name}, "
                f"{wanted[worst, column]:,} somata of radius {radius_um[worst]:.4g} um"
            )
            yield spec_problem(spec, ("layers", column), rule)
    for cell_type, radius in zip(spec.cell_types, radius_um, strict=True):
        if spec.column.edges == "wrap":
            narrow = min(spec.column.width_um, spec.column.length_um)
            if narrow < 2 * radius:
                rule = f"has a soma {2 * radius:.4g} um wide; the box is {narrow:g} um"
                yield spec_problem(spec, ("cell_types", cell_type.name), rule)


def _stage(what: str, spec: Spec, row: int, column: int) -> str:
    # Names hold no line break, so no two pairs of names make one stage.
    return f"{what}\n{spec.cell_types[row].name}\n{spec.layers[column].name}"


def _place_somata(
    spec: Spec, volume: Volume, wanted: np.ndarray, radius_um: np.ndarray
) -> Iterator[tuple[int, int, np.ndarray]]:
    """Yield type, layer and soma centres (n, 3); earlier types do not feel later ones.

    Raises InputError where no place is found for all.
    """
    widest = float(radius_um[wanted.any(axis=1)].max())
    packing = Packing(volume, widest)
    slabs = _slabs(spec, volume)
    for row, counts in enumerate(wanted):
        columns = np.flatnonzero(counts)
        found = packing.fill(
            [slabs[column] for column in columns],
            counts[columns].tolist(),
            float(radius_um[row]),
            spec.seed,
            [_stage("place", spec, row, column) for column in columns],
        )
        for column, centers in zip(columns, found, strict=True):
            missing = int(counts[column]) - len(centers)
            if missing:
                rule = (
                    f"finds no place for {missing:,} of {counts[column]:,} somata of "
                    f"radius {radius_um[row]:.4g} um; lower densities or radii in "
                    f"{spec.layers[column].name}"
                )
                place = ("cell_types", spec.cell_types[row].name)
                raise InputError([spec_problem(spec, place, rule)])
            yield row, int(column), centers


def _outside_um(
    profiles: Sequence[Profile], chosen: np.ndarray, z_um: np.ndarray, thickness: float
) -> np.ndarray:
    """Return the length of cable in all, above the pia and below the cortex, (3,)."""
    total = np.zeros(3)
    for index, profile in enumerate(profiles):
        z = z_um[chosen == index]
        above, below = profile.outside_um(z, thickness)
        total += profile.cable_um * z.size, above.sum(), below.sum()
    return total


def _sort_cells(parts: list[tuple], volume: Volume) -> Cells:
    types, layers, arbors, positions, azimuths = zip(*parts, strict=True)
    sizes = [len(part) for part in positions]
    type_index = np.repeat(np.array(types, np.int32), sizes)
    position_um = np.concatenate(positions)
    order = order_in_space(type_index, position_um, np.array(volume.box_um))
    return Cells(
        type_index=type_index[order],
        layer_index=np.repeat(np.array(layers, np.int32), sizes)[order],
        arbor_index=np.concatenate(arbors).astype(np.int32)[order],
        position_um=np.ascontiguousarray(position_um[order]),
        azimuth_deg=np.concatenate(azimuths)[order],
    )


def _number_warnings(spec: Spec, wanted: np.ndarray) -> Iterator[str]:
    for row, cell_type in enumerate(spec.cell_types):
        for column, layer in enumerate(spec.layers):
            if layer.name in cell_type.density_per_mm3 and not wanted[row, column]:
                density = cell_type.density_per_mm3[layer.name]
                yield (
                    f"{cell_type.name} has no cell in {layer.name}: {density:g} per "
                    "mm3 times its volume there rounds to 0"
                )


def _arbor_warnings(
    spec: Spec, arbors_by_type, wrap_um, above_share, below_share
) -> Iterator[str]:
    for row, (cell_type, arbors) in enumerate(
        zip(spec.cell_types, arbors_by_type, strict=True)
    ):
        above, below = above_share[row], below_share[row]
        if above + below > _WORTH_WARNING:
            yield (
                f"{cell_type.name} has {above:.1%} of its cable above the pia and "
                f"{below:.1%} below the cortex; its reconstructions do not suit the "
                "depth of its layers"
            )
        if any(wrap_um):
            width, name = max((width_um(arbor), arbor.name) for arbor in arbors)
            if width > min(wrap_um):
                yield (
                    f"{cell_type.name}: {name} is {width:.0f} um wide and the wrapped "
                    f"box {min(wrap_um):g} um; its branches meet themselves"
                )


def place_cells(spec: Spec, arbors_by_type: Sequence[Sequence[Arbor]]) -> Placement:
    """Place the cells of a spec.

    Soma centres lie inside their layer and the volume; the soma's surface may cross
    the border, as in a block cut from tissue. Centres of two somata are at least the
    sum of their radii apart. Cells do not change when a cell type is added behind
    theirs.

    Parameters
    ----------
    spec : Spec
        The spec.
    arbors_by_type : sequence of sequences of Arbor
        The reconstructions of every cell type, in the order of the spec.

    Raises
    ------
    InputError
        The mesh is unusable, or the cells do not fit into their layers.
    """
    volume = make_volume(spec)
    layer_volume = np.array([slab.volume_um3 for slab in _slabs(spec, volume)])
    wanted = _wanted(spec, layer_volume)
    radius_um = _soma_radii(spec, arbors_by_type)
    soma_share = _soma_share(wanted, radius_um, layer_volume)
    problems = [
        *_number_problems(spec, wanted, layer_volume),
        *_packing_problems(spec, wanted, radius_um, soma_share),
    ]
    if problems:
        raise InputError(problems)
    cells, cable_um = _furnish(
        spec, volume, arbors_by_type, _place_somata(spec, volume, wanted, radius_um)
    )
    shares = cable_um[:, 1:] / np.where(cable_um[:, :1] > 0, cable_um[:, :1], 1.0)
    above_share, below_share = shares.T
    return Placement(
        cells=cells,
        volume=volume,
        cells_n=wanted,
        layer_volume_um3=layer_volume,
        soma_share=soma_share,
        above_share=above_share,
        below_share=below_share,
        warnings=(
            *volume.warnings,
            *_number_warnings(spec, wanted),
            *_arbor_warnings(
                spec, arbors_by_type, volume.wrap_um, above_share, below_share
            ),
        ),
    )


def _furnish(
    spec: Spec, volume: Volume, arbors_by_type, places
) -> tuple[Cells, np.ndarray]:
    """Give every soma its reconstruction and azimuth; also sum up cable (types, 3)."""
    profiles = [[profile_of(arbor) for arbor in arbors] for arbors in arbors_by_type]
    first_arbor = np.cumsum([0, *map(len, arbors_by_type)])
    # Depths of the upper borders of the layers, and of the white matter.
    top_um = np.cumsum([0.0, *(layer.thickness_um for layer in spec.layers)])
    cable_um = np.zeros((len(profiles), 3))
    parts = []
    for row, column, centers in places:
        stage = _stage("arbor", spec, row, column)
        draws = uniforms(spec.seed, stage, np.arange(len(centers)))
        z = centers[:, 2]
        chosen = choose_profiles(
            profiles[row],
            z,
            draws[:, 1],
            thickness_um=spec.thickness_um,
            is_tufted=has_tuft(profiles[row], top_um[column], top_um[1]),
        )
        cable_um[row] += _outside_um(profiles[row], chosen, z, spec.thickness_um)
        arbors = first_arbor[row] + chosen
        parts.append((row, column, arbors, centers, 360 * draws[:, 0]))
    return _sort_cells(parts, volume), cable_um
