"""Paired recordings: a CSV file or an inline list, checked row by row."""

from __future__ import annotations

import csv
import io
import math
import re
from collections.abc import Iterator
from functools import lru_cache
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field

from circuitgen.core.errors import InputError, Problem
from circuitgen.spec.document import Document, read_text
from circuitgen.spec.fields import LengthUm, PositionUm
from circuitgen.spec.validation import (
    Fault,
    Part,
    RuleError,
    shown,
    unknown_name,
    validate,
)

MOST_PAIRS = 10**9
MOST_SYNAPSES = 10**6

_Count = Annotated[int, Field(ge=0, le=MOST_PAIRS)]
_Sample = Annotated[int, Field(ge=1, le=MOST_PAIRS)]

_BOTH_OR_NEITHER = (
    ("tested_n", "connected_n"),
    ("reciprocal_tested_n", "reciprocal_connected_n"),
    ("soma_depth_low_um", "soma_depth_high_um"),
)
_NEEDS = (
    ("synapses_sd", "synapses_mean"),
    ("synapses_pairs_n", "synapses_mean"),
    ("soma_depth_low_um", "slice_thickness_um"),
)
_NOT_ABOVE = (
    ("connected_n", "tested_n"),
    ("reciprocal_connected_n", "reciprocal_tested_n"),
    ("soma_depth_low_um", "soma_depth_high_um"),
    ("soma_depth_high_um", "slice_thickness_um"),
)
_MEASUREMENTS = (
    "tested_n",
    "connected_n",
    "probability",
    "synapses_mean",
    "synapses_sd",
    "synapses_pairs_n",
    "reciprocal_tested_n",
    "reciprocal_connected_n",
)


class RecordingRow(Part):
    """The columns of a recording; None where the row is blank, units in the names."""

    source: str = ""
    pre_type: str
    post_type: str
    tested_n: _Sample | None = None
    connected_n: _Count | None = None
    probability: Annotated[float, Field(ge=0, le=1)] | None = None
    distance_low_um: PositionUm | None = None
    distance_high_um: LengthUm | None = None
    distance_kind: Literal["soma", "lateral"] = "soma"
    slice_thickness_um: LengthUm | None = None
    soma_depth_low_um: PositionUm | None = None
    soma_depth_high_um: PositionUm | None = None
    synapses_mean: Annotated[float, Field(ge=1, le=MOST_SYNAPSES)] | None = None
    synapses_sd: Annotated[float, Field(ge=0, le=MOST_SYNAPSES)] | None = None
    synapses_pairs_n: _Sample | None = None
    reciprocal_tested_n: _Sample | None = None
    reciprocal_connected_n: _Count | None = None
    cluster_size: Annotated[int, Field(ge=2, le=100)] | None = None
    use: Literal["fit", "audit"] = "fit"

    @classmethod
    def rules(cls, given: dict) -> Iterator[RuleError]:
        """Yield columns that miss their partner or contradict it, and empty rows."""
        yield from _partner_rules(given)
        yield from _order_rules(given)
        yield from _synapse_rules(given)
        counts = [name for name in ("tested_n", "connected_n") if name in given]
        if counts and "probability" in given:
            rule = f"is given beside {counts[0]}; keep the counts or the probability"
            yield RuleError(rule, field="probability")
        if not any(name in given for name in _MEASUREMENTS):
            yield RuleError("measures nothing: give counts, a probability or synapses")


class Recording(RecordingRow):
    """An experiment on ordered pairs of one cell type or group with another.

    Attributes
    ----------
    row : int
        Data row, counted from 1; 0 for one that no file holds.
    file : str
        The file that holds it, as the user would name it: for messages, not for
        tables, since it depends on where the command ran.
    line : int or None
        Its line in that file, counted from 1.
    """

    row: int = 0
    file: str = ""
    line: int | None = None

    @property
    def measured_probability(self) -> float | None:
        """Connected share of the tested pairs, or the probability given; or None."""
        if self.tested_n is None:
            return self.probability
        return self.connected_n / self.tested_n

    def window_um(self) -> tuple[float, float]:
        """Return the window of distances; 0 and infinity where the row has no bound."""
        high = self.distance_high_um
        return self.distance_low_um or 0.0, math.inf if high is None else high


COLUMNS = tuple(RecordingRow.model_fields)
_TEXT_COLUMNS = ("source", "pre_type", "post_type", "distance_kind", "use")
_NUMBER = re.compile(r"[-+]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][-+]?[0-9]+)?")


def _numbers(given: dict, *names: str) -> tuple[float, ...] | None:
    """Return the values of these columns if all of them are finite numbers."""
    values = tuple(given.get(name) for name in names)
    for value in values:
        if isinstance(value, bool) or not isinstance(value, int | float):
            return None
        if not math.isfinite(value):
            return None
    return values


def _partner_rules(given: dict) -> Iterator[RuleError]:
    both_ways = [*_BOTH_OR_NEITHER, *((b, a) for a, b in _BOTH_OR_NEITHER)]
    for name, partner in (*both_ways, *_NEEDS):
        if name in given and partner not in given:
            yield RuleError(f"is missing; {name} needs it", field=partner)


def _order_rules(given: dict) -> Iterator[RuleError]:
    for low, high in _NOT_ABOVE:
        pair = _numbers(given, low, high)
        if pair and pair[0] > pair[1]:
            rule = f"= {shown(pair[0])} must be <= {high} = {shown(pair[1])}"
            yield RuleError(rule, field=low)
    window = _numbers(given, "distance_low_um", "distance_high_um")
    if window and window[0] >= window[1]:
        rule = f"= {shown(window[0])} must be < distance_high_um = {shown(window[1])}"
        yield RuleError(rule, field="distance_low_um")


def _synapse_rules(given: dict) -> Iterator[RuleError]:
    spread = _numbers(given, "synapses_mean", "synapses_sd")
    if spread and spread[0] == 1 and spread[1] > 0:
        rule = f"= {shown(spread[1])} must be 0 when synapses_mean is 1, the least"
        yield RuleError(rule, field="synapses_sd")
    pairs_n = _numbers(given, "synapses_pairs_n")
    if pairs_n and pairs_n[0] == 1 and "synapses_sd" in given:
        rule = "= 1 must be >= 2, since synapses_sd is given"
        yield RuleError(rule, field="synapses_pairs_n")
    if _numbers(given, "probability") == (0,) and "synapses_mean" in given:
        rule = "is given although probability = 0 says that there is no connection"
        yield RuleError(rule, field="synapses_mean")


@lru_cache(maxsize=1024)
def _unknown_type(name: str, names: tuple[str, ...]) -> tuple[str, str | None]:
    # One misspelt type of a spec comes back in many rows.
    rule, nearest = unknown_name(name, names, "cell type or group of the spec")
    return f"= {shown(name)} {rule}", nearest


def _check_row(
    values: dict, names: tuple[str, ...]
) -> tuple[RecordingRow | None, list[Fault]]:
    """Check one row by itself and against the names of types and groups, if any."""
    row, faults = validate(values, RecordingRow)
    for column in ("pre_type", "post_type"):
        name = values.get(column)
        if names and isinstance(name, str) and name not in names:
            faults.append(((column,), *_unknown_type(name, names)))
    return row, faults


def _place(row: RecordingRow, number: int, file: str, line: int) -> Recording:
    # Checked already: its fields by RecordingRow, the place by its maker.
    where = {"row": number, "file": file, "line": line}
    return Recording.model_construct(**dict(row), **where)


def inline_recordings(
    document: Document, names: tuple[str, ...]
) -> Iterator[Recording | Problem]:
    """Yield the good recordings and the faults of the rows that a spec lists itself.

    `names` are the cell types and groups of the spec; empty: names are not checked.
    """
    for index, values in enumerate(document.data["recordings"]):
        if not isinstance(values, dict):
            continue
        here = ("recordings", index)
        row, faults = _check_row(values, names)
        for place, rule, nearest in faults:
            yield document.problem((*here, *place), rule, nearest)
        if not faults:
            yield _place(row, index + 1, str(document.path), document.line(here))


class _Lines:
    """Lines of a CSV text; counts them and skips comments that stand between rows."""

    def __init__(self, text: str):
        self._lines = io.StringIO(text, newline="")
        self._line = 0
        self.row_begins = True
        self.row_line = 0

    def __iter__(self) -> _Lines:
        return self

    def __next__(self) -> str:
        for text in self._lines:
            self._line += 1
            if self.row_begins and text.startswith("#"):
                continue
            if self.row_begins:
                self.row_line, self.row_begins = self._line, False
            return text
        raise StopIteration


def _csv_rows(path: Path) -> Iterator[tuple[int, list[str]]]:
    """Yield the line and the stripped cells of every row that is not blank."""
    lines = _Lines(read_text(path))
    reader = csv.reader(lines, strict=True)
    while True:
        lines.row_begins = True
        try:
            cells = [cell.strip() for cell in next(reader)]
        except StopIteration:
            return
        except csv.Error as error:
            rule = f"is not valid CSV: {error}"
            raise InputError([Problem(str(path), lines.row_line, "", rule)]) from None
        while cells and not cells[-1]:
            cells.pop()
        if cells:
            yield lines.row_line, cells


def _header_faults(header: list[str]) -> Iterator[Fault]:
    for separator, name in ((";", "semicolons"), ("\t", "tabs")):
        if len(header) == 1 and separator in header[0]:
            rule = f"columns must be separated by commas, not by {name}"
            yield (), rule, None
            return
    for index, name in enumerate(header):
        if not name:
            yield (), f"column {index + 1} has no name", None
        elif name not in COLUMNS:
            rule, nearest = unknown_name(name, COLUMNS, "known column")
            yield (name,), rule, nearest
        elif name in header[:index]:
            rule = f"is column {header.index(name) + 1} and column {index + 1}"
            yield (name,), rule, None
    for name in ("pre_type", "post_type"):
        if name not in header:
            yield (name,), "column is missing", None


def _typed(column: str, text: str) -> object:
    """Return a cell as a number where its column holds numbers and it is one."""
    if column in _TEXT_COLUMNS or not _NUMBER.fullmatch(text):
        return text
    number = float(text)
    # Programs that keep blanks in columns of numbers write counts as 12.0.
    is_whole = column.endswith(("_n", "_size")) and number.is_integer()
    return int(number) if is_whole else number


def read_recordings(path: Path, names: tuple[str, ...]) -> Iterator[Recording | Problem]:
    """Yield the good recordings and the faults of a CSV file.

    Lines that begin with ``#`` and blank lines are skipped. If the header is wrong,
    the rows are not looked at. `names`: see `inline_recordings`.
    """
    rows = _csv_rows(path)
    try:
        line, header = next(rows, (None, []))
        faults = list(_header_faults(header)) if header else [((), "is empty", None)]
        yield from _problems(path, line, faults)
        if not faults:
            yield from _csv_recordings(path, header, rows, names)
    except InputError as error:
        yield from error.problems


def _csv_recordings(path, header, rows, names) -> Iterator[Recording | Problem]:
    for number, (line, cells) in enumerate(rows, start=1):
        if len(cells) > len(header):
            rule = f"has {len(cells)} values for {len(header)} columns"
            yield Problem(str(path), line, "", rule)
            continue
        values = {
            column: _typed(column, text)
            for column, text in zip(header, cells, strict=False)
            if text
        }
        row, faults = _check_row(values, names)
        yield from _problems(path, line, faults)
        if not faults:
            yield _place(row, number, str(path), line)


def _problems(path: Path, line: int | None, faults: list[Fault]) -> Iterator[Problem]:
    for place, rule, nearest in faults:
        yield Problem(str(path), line, ".".join(map(str, place)), rule, nearest)
