"""Kinds of field that parts of a document share: names, lengths, positive numbers."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

from pydantic import AfterValidator, Field

from circuitgen.spec.validation import RuleError, shown

MOST_NAME_CHARACTERS = 80
# A metre: far beyond any cortex, and near enough to keep every later product finite.
MOST_UM = 1e6


def _check_name(name: str) -> str:
    if not name or name != name.strip():
        raise RuleError(
            f"= {shown(name)} must not be empty or begin or end with a blank"
        )
    if not name.isprintable():
        raise RuleError(f"= {shown(name)} must be printable text on one line")
    if len(name) > MOST_NAME_CHARACTERS:
        rule = f"has {len(name)} characters; {MOST_NAME_CHARACTERS} are the most"
        raise RuleError(rule)
    return name


Name = Annotated[str, AfterValidator(_check_name)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
NotNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]
LengthUm = Annotated[float, Field(gt=0, le=MOST_UM, allow_inf_nan=False)]
PositionUm = Annotated[float, Field(ge=0, le=MOST_UM, allow_inf_nan=False)]
FileName = Annotated[Path, Field(strict=False)]
