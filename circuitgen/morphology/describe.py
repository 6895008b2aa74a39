"""Short descriptions of cell types, from which stand-in arbors are grown."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, model_validator

from circuitgen.spec import read_document, validate_document

Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Finite = Annotated[float, Field(allow_inf_nan=False)]
Range = tuple[Finite, Finite]
Depth = Annotated[float, Field(ge=0, allow_inf_nan=False)]


class _Plain(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


def _need_one(first: object, second: object, names: str) -> None:
    if (first is None) == (second is None):
        raise ValueError(f"needs exactly one of {names}")


def _need_rising(values: tuple[float, float] | None, name: str) -> None:
    if values is not None and values[0] >= values[1]:
        raise ValueError(f"{name} must be [smaller, larger]")


class Part(_Plain):
    """One simple body of an envelope; carrier points are drawn inside it.

    Attributes
    ----------
    shape : {"ellipsoid", "cylinder", "rows"}
        ``ellipsoid`` and ``cylinder`` stand upright, fade toward their sides and are
        centred near the soma's axis. ``rows`` is a cylinder filled with short
        vertical rows.
    share : float
        Share of the neurite's carrier points, relative to its other parts.
    radius_um : float
        Largest distance from the upright axis.
    height_um : (float, float), optional
        Lowest and highest point, measured up from the soma centre.
    depth_um : (float, float), optional
        Upper and lower end, measured down from the pia. One of the two is given.
    row_length_um : float, optional
        Length of one vertical row; for ``rows`` only.
    """

    shape: Literal["ellipsoid", "cylinder", "rows"]
    share: Positive = 1.0
    radius_um: Positive
    height_um: Range | None = None
    depth_um: Range | None = None
    row_length_um: Positive | None = None

    @model_validator(mode="after")
    def _check(self) -> Part:
        _need_one(self.height_um, self.depth_um, "height_um, depth_um")
        _need_rising(self.height_um, "height_um")
        _need_rising(self.depth_um, "depth_um")
        if (self.shape == "rows") != (self.row_length_um is not None):
            raise ValueError("row_length_um belongs to shape rows, which needs it")
        return self

    def heights_um(self, soma_depth_um: float) -> tuple[float, float]:
        """Return the lowest and highest point above a soma at this depth."""
        if self.height_um is not None:
            return self.height_um
        return soma_depth_um - self.depth_um[1], soma_depth_um - self.depth_um[0]


class Stems(_Plain):
    """Several short stems that leave the soma spread over all azimuths.

    Attributes
    ----------
    count : (int, int)
        Fewest and most stems.
    elevation_deg : (float, float)
        Range of their directions; 90 is toward the pia, -90 toward white matter.
    """

    count: tuple[Annotated[int, Field(ge=1)], Annotated[int, Field(ge=1)]]
    elevation_deg: tuple[
        Annotated[float, Field(ge=-90, le=90)], Annotated[float, Field(ge=-90, le=90)]
    ]

    @model_validator(mode="after")
    def _check(self) -> Stems:
        if self.count[0] > self.count[1]:
            raise ValueError("count must be [fewest, most]")
        _need_rising(self.elevation_deg, "elevation_deg")
        return self


class Trunk(_Plain):
    """One upright trunk from the soma to a height or to a depth.

    Attributes
    ----------
    end_height_um : float, optional
        Where it ends, measured up from the soma centre; negative descends.
    end_depth_um : float, optional
        Where it ends, measured down from the pia. One of the two is given.
    """

    end_height_um: Finite | None = None
    end_depth_um: Depth | None = None

    @model_validator(mode="after")
    def _check(self) -> Trunk:
        _need_one(self.end_height_um, self.end_depth_um, "end_height_um, end_depth_um")
        return self

    def height_um(self, soma_depth_um: float) -> float:
        """Return the height of its end above a soma at this depth."""
        if self.end_height_um is not None:
            return self.end_height_um
        return soma_depth_um - self.end_depth_um


class Neurite(_Plain):
    """One axon, one apical dendrite, or a set of basal dendrites.

    Attributes
    ----------
    kind : {"axon", "basal", "apical"}
        What it is; all dendrites of an interneuron are ``basal``.
    cable_um : float
        Cable length aimed at, stems and trunk included.
    balance : float
        Weight of the path to the soma against the wire; 0 grows a minimum spanning
        tree, large values grow a star.
    stems, trunk : Stems or Trunk
        How it leaves the soma. One of the two is given.
    bare_um : float
        Path from the soma centre on which no branch begins.
    start_radius_um, tip_radius_um : float
        Radius at the soma and at the tips.
    wiggle : float
        Root mean square of the sideways slope of its bends; 0.3 adds about 5 % of
        cable.
    parts : tuple of Part
        The envelope.
    """

    kind: Literal["axon", "basal", "apical"]
    cable_um: Positive
    balance: Annotated[float, Field(ge=0, allow_inf_nan=False)]
    stems: Stems | None = None
    trunk: Trunk | None = None
    bare_um: Positive
    start_radius_um: Positive
    tip_radius_um: Positive
    wiggle: Annotated[float, Field(ge=0, le=1)] = 0.3
    parts: Annotated[tuple[Part, ...], Field(min_length=1)]

    @model_validator(mode="after")
    def _check(self) -> Neurite:
        _need_one(self.stems, self.trunk, "stems, trunk")
        if self.tip_radius_um > self.start_radius_um:
            raise ValueError("tip_radius_um must be <= start_radius_um")
        return self


class Description(_Plain):
    """A cell type in a few lines: where its soma lies and what grows from it.

    Attributes
    ----------
    name : str
        Name of the type; the files are called after it.
    cortex_thickness_um : float
        Nothing grows above the pia (depth 0) or below this depth.
    soma_radius_um : float
        Radius of the soma.
    soma_depths_um : tuple of float
        Depth of the soma below the pia, one for each neuron grown; more neurons
        start again from the first.
    size_spread : float
        Cable and width differ between neurons by up to this share either way.
    neurites : tuple of Neurite
        Everything that leaves the soma.
    """

    name: Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9_\-]*$")]
    cortex_thickness_um: Positive
    soma_radius_um: Positive
    soma_depths_um: Annotated[tuple[Positive, ...], Field(min_length=1)]
    size_spread: Annotated[float, Field(ge=0, le=0.5)] = 0.1
    neurites: Annotated[tuple[Neurite, ...], Field(min_length=1)]

    @model_validator(mode="after")
    def _check(self) -> Description:
        for depth_um in self.soma_depths_um:
            self._check_inside("soma_depths_um", depth_um, depth_um)
            for row, neurite in enumerate(self.neurites):
                field = f"neurites[{row}]"
                if neurite.trunk is not None:
                    end_um = depth_um - neurite.trunk.height_um(depth_um)
                    self._check_inside(f"{field}.trunk ends", end_um, depth_um)
                for column, part in enumerate(neurite.parts):
                    middle_um = depth_um - sum(part.heights_um(depth_um)) / 2
                    place = f"{field}.parts[{column}] has its middle"
                    self._check_inside(place, middle_um, depth_um)
        return self

    def _check_inside(self, what: str, at_um: float, soma_depth_um: float) -> None:
        if not 0 < at_um < self.cortex_thickness_um:
            raise ValueError(
                f"{what} at depth {at_um:g} um for a soma at {soma_depth_um:g} um, "
                f"must lie between 0 and cortex_thickness_um"
            )


def read_description(path: Path) -> Description:
    """Read a description, or raise `InputError` with every problem and its line."""
    return validate_document(read_document(Path(path)), Description)
