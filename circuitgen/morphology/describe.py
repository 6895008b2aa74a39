"""Short descriptions of cell types, from which stand-in arbors are grown."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Literal

from pydantic import AfterValidator, Field

from circuitgen.core.errors import CircuitgenError, InputError, Problem
from circuitgen.spec import (
    Document,
    LengthUm,
    Part,
    Positive,
    RuleError,
    read_document,
    validate_document,
)

_FILE_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9_\-]*")
# Far beyond any neuron; refused before growth takes hours.
MOST_CABLE_UM = 200_000.0


def _check_not_empty(values: tuple) -> tuple:
    if not values:
        raise RuleError("must have at least one entry")
    return values


def _check_rising(values: tuple[float, float]) -> tuple[float, float]:
    if values[0] >= values[1]:
        raise RuleError(f"= [{values[0]:g}, {values[1]:g}] must be [smaller, larger]")
    return values


def _check_counts(values: tuple[int, int]) -> tuple[int, int]:
    if values[0] > values[1]:
        raise RuleError(f"= [{values[0]}, {values[1]}] must be [fewest, most]")
    return values


def _check_file_name(name: str) -> str:
    if not _FILE_NAME.fullmatch(name):
        raise RuleError(f"= '{name}' must be letters, digits, _ and - only")
    return name


def _one_of(given: dict, first: str, second: str) -> Iterator[RuleError]:
    if first in given and second in given:
        yield RuleError(f"is given beside {first}; keep one of the two", field=second)
    if first not in given and second not in given:
        yield RuleError(f"must have {first} or {second}")


Height = Annotated[float, Field(ge=-1e5, le=1e5, allow_inf_nan=False)]
Depth = Annotated[float, Field(ge=0, le=1e5, allow_inf_nan=False)]
Elevation = Annotated[float, Field(ge=-90, le=90)]
Stem = Annotated[int, Field(ge=1, le=30)]


class Body(Part):
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
    radius_um: LengthUm
    height_um: Annotated[tuple[Height, Height], AfterValidator(_check_rising)] | None = (
        None
    )
    depth_um: Annotated[tuple[Depth, Depth], AfterValidator(_check_rising)] | None = None
    row_length_um: LengthUm | None = None

    @classmethod
    def rules(cls, given: dict) -> Iterator[RuleError]:
        """Yield a place that is given in no way or in two, and a row length amiss."""
        yield from _one_of(given, "height_um", "depth_um")
        if given.get("shape") == "rows" and "row_length_um" not in given:
            yield RuleError("is missing; shape rows needs it", field="row_length_um")
        if given.get("shape") != "rows" and "row_length_um" in given:
            yield RuleError("belongs to shape rows only", field="row_length_um")

    def heights_um(self, soma_depth_um: float) -> tuple[float, float]:
        """Return the lowest and highest point above a soma at this depth."""
        if self.height_um is not None:
            return self.height_um
        return soma_depth_um - self.depth_um[1], soma_depth_um - self.depth_um[0]


class Stems(Part):
    """Several short stems that leave the soma spread over all azimuths.

    Attributes
    ----------
    count : (int, int)
        Fewest and most stems.
    elevation_deg : (float, float)
        Range of their directions; 90 is toward the pia, -90 toward white matter.
    """

    count: Annotated[tuple[Stem, Stem], AfterValidator(_check_counts)]
    elevation_deg: Annotated[tuple[Elevation, Elevation], AfterValidator(_check_rising)]


class Trunk(Part):
    """One upright trunk from the soma to a height or to a depth.

    Attributes
    ----------
    end_height_um : float, optional
        Where it ends, measured up from the soma centre; negative descends.
    end_depth_um : float, optional
        Where it ends, measured down from the pia. One of the two is given.
    """

    end_height_um: Height | None = None
    end_depth_um: Depth | None = None

    @classmethod
    def rules(cls, given: dict) -> Iterator[RuleError]:
        """Yield an end that is given in no way or in two."""
        yield from _one_of(given, "end_height_um", "end_depth_um")

    def height_um(self, soma_depth_um: float) -> float:
        """Return the height of its end above a soma at this depth."""
        if self.end_height_um is not None:
            return self.end_height_um
        return soma_depth_um - self.end_depth_um


class Neurite(Part):
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
    parts : tuple of Body
        The envelope.
    """

    kind: Literal["axon", "basal", "apical"]
    cable_um: Annotated[float, Field(gt=0, le=MOST_CABLE_UM, allow_inf_nan=False)]
    balance: Annotated[float, Field(ge=0, le=1000, allow_inf_nan=False)]
    stems: Stems | None = None
    trunk: Trunk | None = None
    bare_um: LengthUm
    start_radius_um: LengthUm
    tip_radius_um: LengthUm
    wiggle: Annotated[float, Field(ge=0, le=1)] = 0.3
    parts: Annotated[tuple[Body, ...], AfterValidator(_check_not_empty)]

    @classmethod
    def rules(cls, given: dict) -> Iterator[RuleError]:
        """Yield a way out of the soma given in no way or in two, and thick tips."""
        yield from _one_of(given, "stems", "trunk")
        start, tip = given.get("start_radius_um"), given.get("tip_radius_um")
        numbers = all(isinstance(value, int | float) for value in (start, tip))
        if numbers and tip > start:
            rule = f"= {tip:g} must be <= start_radius_um = {start:g}"
            yield RuleError(rule, field="tip_radius_um")


class Description(Part):
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

    name: Annotated[str, AfterValidator(_check_file_name)]
    cortex_thickness_um: LengthUm
    soma_radius_um: LengthUm
    soma_depths_um: Annotated[tuple[Depth, ...], AfterValidator(_check_not_empty)]
    size_spread: Annotated[float, Field(ge=0, le=0.5)] = 0.1
    neurites: Annotated[tuple[Neurite, ...], AfterValidator(_check_not_empty)]


class EnvelopeError(CircuitgenError):
    """A neurite cannot grow as described: mend the field that the message names.

    Parameters
    ----------
    place : tuple
        Keys and list places that lead to the field.
    rule : str
        What is wrong, in words that follow the field's name.
    """

    def __init__(self, place: tuple[str | int, ...], rule: str):
        parts = (part + 1 if isinstance(part, int) else part for part in place)
        super().__init__(f"{'.'.join(map(str, parts))} {rule}")
        self.place, self.rule = place, rule


def check_description(document: Document) -> Description:
    """Return a document's description; `InputError` has every problem and its line."""
    description = validate_document(document, Description)
    problems = list(_outside_cortex(document, description))
    if problems:
        raise InputError(problems)
    return description


def read_description(path: Path) -> Description:
    """Read a description; `InputError` has every problem and its line."""
    return check_description(read_document(Path(path)))


def _outside_cortex(document: Document, description: Description) -> Iterator[Problem]:
    """Yield a problem for all that lies above the pia or below the cortex."""
    deepest_um = description.cortex_thickness_um
    limits = f"must lie between 0 and cortex_thickness_um = {deepest_um:g}"
    for index, soma_um in enumerate(description.soma_depths_um):
        if not 0 < soma_um < deepest_um:
            place = ("soma_depths_um", index)
            yield document.problem(place, f"= {soma_um:g} {limits}")
            continue
        for place, what, depth_um in _depths(description, soma_um):
            if not 0 < depth_um < deepest_um:
                rule = f"{what} at depth {depth_um:g} um for a soma at {soma_um:g}"
                yield document.problem(place, f"{rule}, {limits}")


def _depths(description: Description, soma_um: float) -> Iterator[tuple]:
    """Yield the depths at which trunks end and the bodies of envelopes lie."""
    for row, neurite in enumerate(description.neurites):
        if neurite.trunk is not None:
            end_um = soma_um - neurite.trunk.height_um(soma_um)
            yield ("neurites", row, "trunk"), "ends", end_um
        for column, body in enumerate(neurite.parts):
            middle_um = soma_um - sum(body.heights_um(soma_um)) / 2
            yield ("neurites", row, "parts", column), "has its middle", middle_um
