"""What a spec says: typed, checked part by part, frozen."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Literal

from pydantic import AfterValidator, BeforeValidator, Field

from circuitgen.spec.fields import (
    FileName,
    LengthUm,
    Name,
    NotNegative,
    PositionUm,
    Positive,
)
from circuitgen.spec.recordings import Recording
from circuitgen.spec.validation import Part, RuleError, shown

# Far beyond any tissue; refused before they exhaust the memory.
MOST_PER_MM3 = 1e8
MOST_CELLS = 10**8

_SIZES = {
    "cylinder": ("diameter_um",),
    "hexagon": ("across_flats_um",),
    "box": ("width_um", "length_um"),
    "mesh": ("file",),
}
_MESH_ENDINGS = (".stl", ".obj", ".ply", ".glb")


def _check_each_once(names: tuple[str, ...]) -> tuple[str, ...]:
    for index, name in enumerate(names):
        if name in names[:index]:
            raise RuleError(f"names {shown(name)} twice")
    return names


def _as_tuple(value: object) -> object:
    """Return one file name as a list of one; anything else as it is."""
    return (value,) if isinstance(value, str) else value


def _check_file_or_rows(value: object) -> object:
    if isinstance(value, str) or (
        isinstance(value, tuple) and all(isinstance(row, dict) for row in value)
    ):
        return value
    raise RuleError("must be a file name or a list of rows of 'column: value'")


DensityPerMm3 = Annotated[float, Field(gt=0, le=MOST_PER_MM3, allow_inf_nan=False)]
CellsN = Annotated[int, Field(ge=1, le=MOST_CELLS)]
Target = Literal["soma", "axon_initial_segment", "basal", "apical"]


class ColumnSpec(Part):
    """Shape of the piece of cortex seen from the pia, and what its edges do.

    `file`, the closed mesh, is absolute in a loaded spec.
    """

    shape: Literal["cylinder", "hexagon", "box", "mesh"]
    diameter_um: LengthUm | None = None
    across_flats_um: LengthUm | None = None
    width_um: LengthUm | None = None
    length_um: LengthUm | None = None
    file: FileName | None = None
    edges: Literal["open", "wrap"] = "open"

    @classmethod
    def rules(cls, given: dict) -> Iterator[RuleError]:
        """Yield sizes that the shape lacks or does not have, and edges amiss."""
        shape = given.get("shape")
        if not isinstance(shape, str) or shape not in _SIZES:
            return
        for name in _SIZES[shape]:
            if name not in given:
                yield RuleError(f"is missing; shape {shape} needs it", field=name)
        for name in (name for names in _SIZES.values() for name in names):
            if name in given and name not in _SIZES[shape]:
                rule = f"does not belong to shape {shape}"
                yield RuleError(rule, field=name, nearest=_SIZES[shape][0])
        if given.get("edges") == "wrap" and shape != "box":
            yield RuleError(f"= 'wrap' needs shape box, not {shape}", field="edges")
        file = given.get("file")
        if isinstance(file, str) and not file.lower().endswith(_MESH_ENDINGS):
            rule = f"= {shown(file)} must end in {', '.join(_MESH_ENDINGS)}"
            yield RuleError(rule, field="file")


class Layer(Part):
    """One layer; layers are listed from the pia downward."""

    name: Name
    thickness_um: LengthUm


class BoutonDensity(Part):
    """Synapses that an axon makes per length, and how surely that is known."""

    mean: Positive
    sd: Positive


class CellTypeEntry(Part):
    """A cell type as the file has it: `morphologies` are patterns of file names."""

    sign: Literal["excitatory", "inhibitory"]
    density_per_mm3: dict[str, DensityPerMm3] = Field(default_factory=dict, min_length=1)
    count: dict[str, CellsN] = Field(default_factory=dict, min_length=1)
    morphologies: Annotated[
        tuple[FileName, ...], BeforeValidator(_as_tuple), Field(min_length=1)
    ]
    upright: Literal["x", "y", "z", "-x", "-y", "-z"] = "y"
    soma_radius_um: LengthUm | None = None
    targets: Annotated[
        tuple[Target, ...], Field(min_length=1), AfterValidator(_check_each_once)
    ] = ("soma", "basal", "apical")
    # 40 um: common practice, no source.
    ais_um: PositionUm = 40.0
    bouton_density_per_um: BoutonDensity | None = None

    @classmethod
    def rules(cls, given: dict) -> Iterator[RuleError]:
        """Yield a number of cells that is given in no way or in two."""
        if "density_per_mm3" in given and "count" in given:
            rule = "is given beside density_per_mm3; keep one of the two"
            yield RuleError(rule, field="count")
        if "density_per_mm3" not in given and "count" not in given:
            yield RuleError("must have density_per_mm3 or count")


class CellType(CellTypeEntry):
    """A cell type of a loaded spec: its name, and the files of its reconstructions.

    Attributes
    ----------
    name : str
        The key of the file.
    density_per_mm3 : dict of str to float
        Cells per mm3 by layer; empty when `count` is given.
    count : dict of str to int
        Cells by layer; empty when `density_per_mm3` is given.
    morphologies : tuple of Path
        SWC files, absolute and sorted, at least one.
    upright : str
        Axis of the SWC files that points to the pia.
    soma_radius_um : float or None
        Radius of the sphere that no other soma may enter; None: the morphology's.
    targets : tuple of str
        What the type's own axon may contact.
    ais_um : float
        Length of axon from the soma that is axon initial segment.
    bouton_density_per_um : BoutonDensity or None
        Synapses per micrometre of the type's axon.
    """

    name: str

    @property
    def is_excitatory(self) -> bool:
        """True for an excitatory type."""
        return self.sign == "excitatory"


class AppositionRules(Part):
    """What counts as an apposition.

    The bounds keep the work finite: a spacing of nothing would cut arbors to dust.
    """

    max_gap_um: Annotated[float, Field(ge=0, le=50, allow_inf_nan=False)] = 0.5
    min_spacing_um: Annotated[float, Field(ge=0.5, le=50, allow_inf_nan=False)] = 4.0
    autapses: bool = False


class Conduction(Part):
    """How long a spike takes from the soma to the other side of a synapse."""

    axon_um_per_ms: Positive = 300.0
    synaptic_delay_ms: NotNegative = 0.5


class SpecFile(Part):
    """The fields of a spec file; names that refer to each other are not checked yet."""

    name: Name
    seed: Annotated[int, Field(ge=0, le=2**64 - 1)]
    column: ColumnSpec
    layers: Annotated[tuple[Layer, ...], Field(min_length=1)]
    cell_types: Annotated[dict[Name, CellTypeEntry], Field(min_length=1)]
    groups: dict[Name, Annotated[tuple[str, ...], Field(min_length=1)]] = Field(
        default_factory=dict
    )
    appositions: AppositionRules = AppositionRules()
    recordings: Annotated[object, AfterValidator(_check_file_or_rows)] = ()
    conduction: Conduction = Conduction()


@dataclass(frozen=True)
class Spec:
    """A checked spec: every name in it is known, every file that it names exists.

    Attributes
    ----------
    name : str
        Name of the circuit.
    seed : int
        Seed of every draw, 0 to 2**64 - 1.
    column : ColumnSpec
        Shape of the piece of cortex.
    layers : tuple of Layer
        From the pia downward.
    cell_types : tuple of CellType
        In the order of the file.
    groups : dict of str to tuple of str
        Names of cell types by name of the group.
    appositions : AppositionRules
        What counts as an apposition.
    recordings : tuple of Recording
        In the order of the file; empty when there are none.
    conduction : Conduction
        Speeds and delays.
    path : Path
        The spec file, absolute.
    text : str
        Its text.
    input_files : tuple of Path
        Every file that the spec names, absolute and sorted.
    """

    name: str
    seed: int
    column: ColumnSpec
    layers: tuple[Layer, ...]
    cell_types: tuple[CellType, ...]
    groups: dict[str, tuple[str, ...]]
    appositions: AppositionRules
    recordings: tuple[Recording, ...]
    conduction: Conduction
    path: Path
    text: str
    input_files: tuple[Path, ...]

    @property
    def thickness_um(self) -> float:
        """Thickness of the cortex, pia to white matter: the sum of the layers."""
        return sum(layer.thickness_um for layer in self.layers)

    @property
    def layer_bounds_um(self) -> tuple[tuple[float, float], ...]:
        """Lowest and highest z of each layer, from the pia downward."""
        # Each bound is one sum, so that a layer ends exactly where the next begins.
        thicknesses = [layer.thickness_um for layer in self.layers]
        tops = [sum(thicknesses[place:]) for place in range(len(thicknesses) + 1)]
        return tuple(zip(tops[1:], tops, strict=False))

    @property
    def type_names(self) -> tuple[str, ...]:
        """Names of the cell types, in the order of the file."""
        return tuple(cell_type.name for cell_type in self.cell_types)

    def members(self, name: str) -> tuple[int, ...]:
        """Return the indices of the cell types that a type's or group's name means.

        Raises KeyError for a name that is neither.
        """
        index = {known: place for place, known in enumerate(self.type_names)}
        return tuple(index[member] for member in self.groups.get(name, (name,)))
