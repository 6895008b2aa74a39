"""The short description from which stand-in arbors of one cell type are grown."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, model_validator

from circuitgen.spec import (
    Name,
    Part,
    Positive,
    RuleError,
    read_document,
    validate_document,
)

Height = Annotated[float, Field(ge=-5000, le=5000, allow_inf_nan=False)]
Share = Annotated[float, Field(gt=0, le=1)]


class _AtHeight(Part):
    """A height relative to the soma, or a depth below the pia; one of the two."""

    height_um: Height | None = None
    depth_um: Height | None = None

    @model_validator(mode="after")
    def _one_height(self):
        if (self.height_um is None) == (self.depth_um is None):
            raise RuleError("needs height_um or depth_um, one of the two")
        return self

    def above_soma_um(self, soma_depth_um: float) -> float:
        """Height above the soma of a cell at the given depth."""
        if self.depth_um is None:
            return self.height_um
        return soma_depth_um - self.depth_um


class Cloud(_AtHeight):
    """An ellipsoid about the cell's axis in which the tree looks for carrier points."""

    share: Share = 1.0
    half_height_um: Positive
    half_width_um: Positive


class Trunk(_AtHeight):
    """A straight main branch from the soma up or down to a height."""


class Tree(Part):
    """One tree of the cell: its cable, where it goes, how thick it is.

    `balance` weighs path length to the soma against wire: 0 gives the shortest tree,
    1 nearly direct paths. Radii fall from start to end over `taper_um` of path.
    """

    kind: Literal["axon", "basal", "apical"]
    cable_um: Positive
    balance: Annotated[float, Field(ge=0, le=2)] = 0.4
    stems: Annotated[int, Field(ge=1, le=12)] = 1
    trunk: Trunk | None = None
    clouds: Annotated[tuple[Cloud, ...], Field(min_length=1)]
    start_radius_um: Positive
    end_radius_um: Positive
    taper_um: Positive = 60.0


class GrowthDescription(Part):
    """A cell type to grow: one file per soma depth, y toward the pia."""

    type: Name
    seed: Annotated[int, Field(ge=0, lt=2**64)] = 1
    soma_radius_um: Positive
    soma_depths_um: Annotated[tuple[Positive, ...], Field(min_length=1)]
    trees: Annotated[tuple[Tree, ...], Field(min_length=1)]


def read_growth(path: Path) -> GrowthDescription:
    """Read a growth description; InputError names every problem with its line."""
    return validate_document(read_document(Path(path)), GrowthDescription)
