"""Paired recordings: a CSV file or an inline list, checked row by row."""

from __future__ import annotations

import csv
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from circuitgen.core.errors import InputError, Problem, nearest_name
from circuitgen.spec.document import RuleError, describe_error, read_text

_Count = Annotated[int, Field(ge=0)]
_Share = Annotated[float, Field(ge=0, le=1, allow_inf_nan=False)]
_Size = Annotated[float, Field(ge=0, allow_inf_nan=False)]


def _together(row: Recording, names: Iterable[str]) -> None:
    given = [name for name in names if getattr(row, name) is not None]
    missing = [name for name in names if getattr(row, name) is None]
    if given and missing:
        raise RuleError(f"has {given[0]} but no {missing[0]}; both or neither")


def _ordered(row: Recording, low: str, high: str, *, equal: bool) -> None:
    a, b = getattr(row, low), getattr(row, high)
    if a is not None and b is not None and (a > b or (a == b and not equal)):
        raise RuleError(f"{low} = {a:g} must be below {high} = {b:g}")


class Recording(BaseModel):
    """One row: an experiment on ordered pairs of one type (or group) with another.

    Units are in the names; None where the row says nothing. `row` counts data rows
    from 1; `line` is the line in the file that holds the row.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    source: str = ""
    pre_type: str
    post_type: str
    tested_n: Annotated[int, Field(ge=1)] | None = None
    connected_n: _Count | None = None
    probability: _Share | None = None
    distance_low_um: _Size | None = None
    distance_high_um: _Size | None = None
    distance_kind: Literal["soma", "lateral"] = "soma"
    slice_thickness_um: Annotated[float, Field(gt=0)] | None = None
    soma_depth_low_um: _Size | None = None
    soma_depth_high_um: _Size | None = None
    synapses_mean: Annotated[float, Field(ge=1, allow_inf_nan=False)] | None = None
    synapses_sd: _Size | None = None
    synapses_pairs_n: Annotated[int, Field(ge=1)] | None = None
    reciprocal_tested_n: Annotated[int, Field(ge=1)] | None = None
    reciprocal_connected_n: _Count | None = None
    use: Literal["fit", "audit"] = "fit"
    row: int = 0
    file: str = ""
    line: int | None = None

    @model_validator(mode="after")
    def _rules_between_fields(self):
        _together(self, ("tested_n", "connected_n"))
        _together(self, ("reciprocal_tested_n", "reciprocal_connected_n"))
        _together(self, ("soma_depth_low_um", "soma_depth_high_um"))
        for low, high in (
            ("connected_n", "tested_n"),
            ("reciprocal_connected_n", "reciprocal_tested_n"),
            ("soma_depth_low_um", "soma_depth_high_um"),
            ("soma_depth_high_um", "slice_thickness_um"),
        ):
            _ordered(self, low, high, equal=True)
        _ordered(self, "distance_low_um", "distance_high_um", equal=False)
        if self.tested_n is not None and self.probability is not None:
            raise RuleError("has counts and a probability; give one of the two")
        if self.synapses_mean is None and self.synapses_sd is not None:
            raise RuleError("has synapses_sd but no synapses_mean")
        if self.synapses_mean is None and self.synapses_pairs_n is not None:
            raise RuleError("has synapses_pairs_n but no synapses_mean")
        if self.soma_depth_low_um is not None and self.slice_thickness_um is None:
            raise RuleError("has a soma depth but no slice_thickness_um")
        measured = (self.tested_n, self.probability, self.synapses_mean)
        if (*measured, self.reciprocal_tested_n) == (None,) * 4:
            raise RuleError("measures nothing: give counts, a probability or synapses")
        return self

    @property
    def measured_probability(self) -> float | None:
        """Connected share of the tested pairs, or the probability as given."""
        if self.tested_n is None:
            return self.probability
        return self.connected_n / self.tested_n

    def window_um(self) -> tuple[float, float]:
        """Distance window, from 0 and to infinity where the row sets no bound."""
        high = self.distance_high_um
        return self.distance_low_um or 0.0, float("inf") if high is None else high


COLUMNS = tuple(n for n in Recording.model_fields if n not in ("row", "file", "line"))


@dataclass(frozen=True)
class _Raw:
    """One row before it is checked, and where it stands."""

    fields: Mapping[str, object]
    row: int
    file: str
    line: int | None


def _header_problems(path: Path, header: list[str]) -> list[Problem]:
    problems = []
    for name in header:
        if name not in COLUMNS:
            near = nearest_name(name, COLUMNS)
            rule = f"column {name!r} is not known"
            if ";" in name:
                rule, near = "columns must be separated by commas, not semicolons", None
            problems.append(Problem(str(path), 1, "", rule, near))
        elif header.count(name) > 1:
            problems.append(Problem(str(path), 1, name, "column is given twice"))
    if not any(";" in name for name in header):
        for name in ("pre_type", "post_type"):
            if name not in header:
                problems.append(Problem(str(path), 1, name, "column is missing"))
    return list(dict.fromkeys(problems))


def _csv_rows(path: Path) -> tuple[list[_Raw], list[Problem]]:
    reader = csv.reader(read_text(path).splitlines())
    header: list[str] | None = None
    rows: list[_Raw] = []
    problems: list[Problem] = []
    for cells in reader:
        values = [cell.strip() for cell in cells]
        if not any(values) or values[0].startswith("#"):
            continue
        if header is None:
            while values and not values[-1]:
                values.pop()
            header = values
            if problems := _header_problems(path, header):
                return [], problems
            continue
        if any(values[len(header) :]):
            rule = f"has {len(values)} fields for {len(header)} columns"
            problems.append(Problem(str(path), reader.line_num, "", rule))
            continue
        pairs = zip(header, values, strict=False)
        fields = {name: value for name, value in pairs if value}
        rows.append(_Raw(fields, len(rows) + 1, str(path), reader.line_num))
    if header is None:
        problems.append(Problem(str(path), 1, "", "has no header line"))
    return rows, problems


def _check_row(raw: _Raw, names: list[str]) -> tuple[Recording | None, list[Problem]]:
    place = {"row": raw.row, "file": raw.file, "line": raw.line}
    problems, recording = [], None
    try:
        recording = Recording.model_validate({**raw.fields, **place})
    except ValidationError as failure:
        for error in failure.errors(include_url=False):
            field = ".".join(map(str, error["loc"]))
            rule, near = describe_error(Recording, error)
            problems.append(Problem(raw.file, raw.line, field, rule, near))
    for field in ("pre_type", "post_type"):
        value = raw.fields.get(field)
        if isinstance(value, str) and value not in names:
            rule = f"= {value!r} is no cell type or group of the spec"
            near = nearest_name(value, names)
            problems.append(Problem(raw.file, raw.line, field, rule, near))
    return recording, problems


def check_recordings(
    rows: Iterable[_Raw], names: Iterable[str]
) -> tuple[tuple[Recording, ...], list[Problem]]:
    """Check rows against the names of cell types and groups; collect all problems."""
    names, recordings, problems = list(names), [], []
    for raw in rows:
        recording, found = _check_row(raw, names)
        problems += found
        recordings.append(recording)
    return tuple(recordings), problems


def read_recordings(path: Path, names: Iterable[str]):
    """Read a CSV file of recordings; return (recordings, problems)."""
    try:
        rows, problems = _csv_rows(path)
    except InputError as error:
        return (), list(error.problems)
    except csv.Error as error:
        return (), [Problem(str(path), None, "", f"is not valid CSV: {error}")]
    recordings, more = check_recordings(rows, names)
    return recordings, problems + more


def inline_recordings(document, names: Iterable[str]):
    """Check the recordings written in the spec itself; return (recordings, problems)."""
    rows = [
        _Raw(
            {key: value for key, value in fields.items() if value is not None},
            index + 1,
            str(document.path),
            document.line(("recordings", index)),
        )
        for index, fields in enumerate(document.data["recordings"])
        if isinstance(fields, dict)
    ]
    return check_recordings(rows, names)
