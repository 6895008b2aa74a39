"""Measured spread of degrees against a circuit: how much cells differ in partners."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.stats import f

from circuitgen.audit.circuit import AuditCircuit
from circuitgen.core.errors import InputError, Problem, nearest_name

COLUMNS = ("source", "types", "direction", "coefficient_of_variation", "cells_n")
DIRECTIONS = ("in", "out")


@dataclass(frozen=True)
class DegreeSpread:
    """Sd over mean of the degrees of some cells of a type or group.

    A ratio, since the number of partners depends on how much tissue holds them.
    """

    row: int
    source: str
    types: str
    direction: str
    variation: float
    cells_n: int


def read_degrees(path: Path, names: Sequence[str]) -> list[DegreeSpread]:
    """Read measured spreads of degrees from a CSV file.

    Columns: source, types (a cell type or group of `names`), direction (in or out),
    coefficient_of_variation, cells_n. InputError lists all that is wrong.
    """
    path, problems, out = Path(path), [], []
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            reader = csv.DictReader(stream)
            header, rows = reader.fieldnames or [], list(reader)
    except (OSError, UnicodeDecodeError) as error:
        rule = f"cannot be read: {error}"
        raise InputError([Problem(str(path), None, "", rule)]) from None
    for name in COLUMNS[1:]:
        if name not in header:
            nearest = nearest_name(name, header)
            problems.append(Problem(str(path), 1, name, "column is missing", nearest))
    for line, row in enumerate([] if problems else rows, start=2):
        fields = {name: (row.get(name) or "").strip() for name in COLUMNS}
        for name, known in (("types", names), ("direction", DIRECTIONS)):
            if fields[name] not in known:
                rule = f"= {fields[name]!r} is unknown"
                nearest = nearest_name(fields[name], known)
                problems.append(Problem(str(path), line, name, rule, nearest))
        numbers = []
        for name, kind, least in ((COLUMNS[3], float, 0.0), (COLUMNS[4], int, 3)):
            try:
                numbers.append(kind(fields[name]))
            except ValueError:
                numbers.append(np.nan)
            if not least <= numbers[-1] < np.inf:
                rule = f"= {fields[name]!r} must be a number >= {least:g}"
                problems.append(Problem(str(path), line, name, rule))
        words = (fields["source"], fields["types"], fields["direction"])
        out.append((line - 1, *words, *numbers))
    if not problems and not out:
        problems.append(Problem(str(path), None, "", "holds no row"))
    if problems:
        raise InputError(problems)
    return [DegreeSpread(*values) for values in out]


@dataclass(frozen=True)
class SpreadFound:
    """A circuit's spread of degrees, that by chance, and the two-sided p-value."""

    variation: float
    by_chance: float
    p_value: float


def compare_spread(circuit: AuditCircuit, measured: DegreeSpread) -> SpreadFound | None:
    """Compare a measured coefficient of variation with a circuit's; None without cells.

    F test of the ratio of squares, as for variances of normal samples; degrees of
    tens and more are near enough to normal. By chance: every pair connects alike.
    """
    ends = circuit.pre if measured.direction == "out" else circuit.post
    degree = np.bincount(ends, minlength=circuit.cells.cells_n)
    chosen = np.isin(circuit.cells.type_index, circuit.members(measured.types))
    own = degree[chosen].astype(float)
    if own.size < 2 or own.mean() == 0.0:
        return None
    variation = float(own.std(ddof=1) / own.mean())
    share = own.mean() / (circuit.cells.cells_n - 1)
    by_chance = float(np.sqrt((1.0 - share) / own.mean()))
    if variation == 0.0 or measured.variation == 0.0:
        return SpreadFound(variation, by_chance, float(variation == measured.variation))
    ratio = (measured.variation / variation) ** 2
    freedom = (measured.cells_n - 1, own.size - 1)
    tail = min(f.cdf(ratio, *freedom), f.sf(ratio, *freedom))
    return SpreadFound(variation, by_chance, float(min(1.0, 2 * tail)))
