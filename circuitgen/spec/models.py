"""What a spec says: typed, checked field by field, frozen."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    ConfigDict,
    Discriminator,
    Field,
    Tag,
    model_validator,
)

from circuitgen.spec.document import RuleError

MOST_NAME_CHARACTERS = 80
Target = Literal["soma", "axon_initial_segment", "basal", "apical"]
Upright = Literal["x", "y", "z", "-x", "-y", "-z"]


def _check_name(name: str) -> str:
    if not name or name != name.strip():
        raise RuleError(f"= {name!r} must not be empty or begin or end with a blank")
    if len(name) > MOST_NAME_CHARACTERS or not name.isprintable():
        raise RuleError(f"must be printable, {MOST_NAME_CHARACTERS} characters at most")
    return name


Name = Annotated[str, AfterValidator(_check_name)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
NotNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]


def _text_or_list(value: object) -> str | None:
    """Tag of the branch by which a value is judged, so that one mistake is one."""
    return {str: "text", tuple: "list"}.get(type(value))


_Either = Discriminator(_text_or_list)
Files = Annotated[
    Annotated[str, Tag("text")] | Annotated[tuple[str, ...], Tag("list")], _Either
]
Rows = Annotated[
    Annotated[str, Tag("text")] | Annotated[tuple[dict, ...], Tag("list")], _Either
]


class Part(BaseModel):
    """A part of a spec: unknown keys refused, types taken at their word, frozen."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True)


_SIZES = {
    "cylinder": ("diameter_um",),
    "hexagon": ("across_flats_um",),
    "box": ("width_um", "length_um"),
    "mesh": ("file",),
}


class ColumnSpec(Part):
    """Shape of the piece of cortex, seen from the pia, and what its edges do."""

    shape: Literal["cylinder", "hexagon", "box", "mesh"]
    diameter_um: Positive | None = None
    across_flats_um: Positive | None = None
    width_um: Positive | None = None
    length_um: Positive | None = None
    file: str | None = None
    edges: Literal["open", "wrap"] = "open"

    @model_validator(mode="after")
    def _sizes_fit_shape(self):
        for shape, names in _SIZES.items():
            for name in names:
                given = getattr(self, name) is not None
                if shape == self.shape and not given:
                    raise RuleError(f"of shape {self.shape} needs {name}")
                if given and name not in _SIZES[self.shape]:
                    raise RuleError(f"of shape {self.shape} has no {name}")
        if self.edges == "wrap" and self.shape != "box":
            raise RuleError("edges: wrap needs shape: box")
        return self


class Layer(Part):
    """One layer; layers are listed from the pia downward."""

    name: Name
    thickness_um: Positive


class CellType(Part):
    """One cell type: how many cells, which reconstructions, what its axon contacts."""

    sign: Literal["excitatory", "inhibitory"]
    density_per_mm3: dict[str, NotNegative] = Field(default_factory=dict)
    count: dict[str, Annotated[int, Field(ge=0, le=10**8)]] = Field(default_factory=dict)
    morphologies: Files
    upright: Upright = "y"
    soma_radius_um: Positive | None = None
    targets: tuple[Target, ...] = ("soma", "basal", "apical")
    ais_um: NotNegative = 40.0

    @model_validator(mode="after")
    def _one_kind_of_number(self):
        if bool(self.density_per_mm3) == bool(self.count):
            raise RuleError("needs density_per_mm3 or count, one of the two")
        if not self.targets or len(set(self.targets)) != len(self.targets):
            raise RuleError("targets must name each target once, and at least one")
        return self


class AppositionRules(Part):
    """What counts as an apposition (see the README)."""

    max_gap_um: Annotated[float, Field(ge=0, le=50, allow_inf_nan=False)] = 0.5
    min_spacing_um: Annotated[float, Field(ge=0.5, le=50, allow_inf_nan=False)] = 4.0
    autapses: bool = False


class Conduction(Part):
    """How long a spike takes from the soma to a synapse's target."""

    axon_um_per_ms: Positive = 300.0
    synaptic_delay_ms: NotNegative = 0.5


class SpecFile(Part):
    """The fields of a spec file, each checked by itself."""

    name: Name
    seed: Annotated[int, Field(ge=0, lt=2**64)]
    column: ColumnSpec
    layers: Annotated[tuple[Layer, ...], Field(min_length=1)]
    cell_types: Annotated[dict[Name, CellType], Field(min_length=1)]
    groups: dict[Name, tuple[str, ...]] = Field(default_factory=dict)
    appositions: AppositionRules = AppositionRules()
    recordings: Rows = ()
    conduction: Conduction = Conduction()


@dataclass(frozen=True)
class PlacedCellType:
    """A cell type with its name and the reconstruction files that its glob found."""

    name: str
    sign: str
    density_per_mm3: dict[str, float]
    count: dict[str, int]
    morphologies: tuple[Path, ...]
    upright: str
    soma_radius_um: float | None
    targets: tuple[str, ...]
    ais_um: float

    @property
    def is_excitatory(self) -> bool:
        """True for an excitatory type."""
        return self.sign == "excitatory"


@dataclass(frozen=True)
class Spec:
    """A checked spec: every name in it is known, every file it names exists."""

    path: Path
    text: str
    name: str
    seed: int
    column: ColumnSpec
    mesh_file: Path | None
    layers: tuple[Layer, ...]
    cell_types: tuple[PlacedCellType, ...]
    groups: dict[str, tuple[str, ...]]
    appositions: AppositionRules
    recordings: tuple
    conduction: Conduction
    input_files: tuple[Path, ...]

    @property
    def thickness_um(self) -> float:
        """Thickness of the cortex: the sum of the layers."""
        return sum(layer.thickness_um for layer in self.layers)

    @property
    def type_names(self) -> tuple[str, ...]:
        """Names of the cell types in the order of the file."""
        return tuple(cell_type.name for cell_type in self.cell_types)

    @property
    def layer_bounds_um(self) -> tuple[tuple[float, float], ...]:
        """Lowest and highest z of each layer, pia downward."""
        bounds, top = [], self.thickness_um
        for layer in self.layers:
            bounds.append((top - layer.thickness_um, top))
            top -= layer.thickness_um
        return tuple(bounds)

    def members(self, name: str) -> tuple[int, ...]:
        """Return the indices of the cell types that a type or group name stands for."""
        names = self.groups.get(name, (name,))
        return tuple(self.type_names.index(member) for member in names)
