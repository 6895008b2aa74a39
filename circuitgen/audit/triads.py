"""Counted triads against a circuit, and what its distances alone would give.

Triples are drawn as cells recorded together are: a first cell, and two others within the
window of it and of each other. The share of each class among them stands against the
counts. Beside it stands the share in a null that keeps the circuit's dependence on
distance and nothing else: independent directions with the circuit's probability at the
distance of each pair, by bins of 25 um.
"""

from __future__ import annotations

import csv
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from circuitgen.audit.circuit import AuditCircuit
from circuitgen.audit.graph import CLASSES, MUTUAL, NULL, RECEIVES, SENDS, triad_class
from circuitgen.core.draws import uniforms
from circuitgen.core.errors import InputError, Problem, nearest_name
from circuitgen.run import soma_offsets

COLUMNS = ("source", "types", "distance_high_um", "class", "count")
_TRIPLES = 30_000
_BIN_UM = 25.0
_TIES = (SENDS, RECEIVES, MUTUAL, NULL)
_PLACE = {name: place for place, name in enumerate(CLASSES)}
# Class of every combination of the ties a-b, b-c, a-c, numbered 16 x + 4 y + z.
_CLASS_OF_TIES = np.array(
    [_PLACE[triad_class((x, y, z))] for x in _TIES for y in _TIES for z in _TIES]
)


@dataclass(frozen=True)
class TriadCount:
    """Counts of triad classes among cells of a type or group, recorded together."""

    row: int
    source: str
    types: str
    high_um: float
    counts: dict[str, int]

    @property
    def total(self) -> int:
        """All triads counted."""
        return sum(self.counts.values())


def _number(text: str, kind, least: float):
    try:
        value = kind(text)
    except ValueError:
        return None
    return value if value >= least else None


def read_triads(path: Path, names: Sequence[str]) -> list[TriadCount]:
    """Read counts of triads from a CSV file.

    Columns: source, types (a cell type or group of `names`), distance_high_um (blank:
    any), class, count; rows alike but for the class belong together. InputError lists
    all that is wrong.
    """
    path, problems = Path(path), []
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            reader = csv.DictReader(stream)
            header, rows = reader.fieldnames or [], list(reader)
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            [Problem(str(path), None, "", f"cannot be read: {error}")]
        ) from None
    for name in ("types", "class", "count"):
        if name not in header:
            nearest = nearest_name(name, header)
            problems.append(Problem(str(path), 1, name, "column is missing", nearest))
    if problems:
        raise InputError(problems)
    found: dict[tuple[str, str, float], dict[str, int]] = {}
    for line, row in enumerate(rows, start=2):
        fields = {name: (row.get(name) or "").strip() for name in COLUMNS}
        high = _number(fields["distance_high_um"] or "inf", float, 1e-9)
        count = _number(fields["count"], int, 0)
        for name, known in (("types", names), ("class", CLASSES)):
            if fields[name] not in known:
                rule = f"= {fields[name]!r} is unknown"
                nearest = nearest_name(fields[name], known)
                problems.append(Problem(str(path), line, name, rule, nearest))
        for name, value in (("distance_high_um", high), ("count", count)):
            if value is None:
                rule = f"= {fields[name]!r} must be a number, not negative"
                problems.append(Problem(str(path), line, name, rule))
        if not problems:
            key = (fields["source"], fields["types"], high)
            found.setdefault(key, {})[fields["class"]] = count
    if not problems and not found:
        problems.append(Problem(str(path), None, "", "holds no count"))
    if problems:
        raise InputError(problems)
    return [
        TriadCount(row, *key, counts)
        for row, (key, counts) in enumerate(found.items(), start=1)
    ]


def draw_triples(circuit: AuditCircuit, counted: TriadCount) -> np.ndarray:
    """Draw triples of different cells within the window of each other, (n, 3)."""
    types = np.isin(circuit.cells.type_index, circuit.members(counted.types))
    cells = np.flatnonzero(types)
    if cells.size < 3:
        return np.zeros((0, 3), np.int64)
    draws = uniforms(0, "triples", np.arange(_TRIPLES), counted.row)
    first = np.sort((draws[:, 0] * cells.size).astype(int))
    out = np.zeros((_TRIPLES, 3), np.int64)
    out[:, 0] = cells[first]
    for begin, end in _runs(first):
        own = cells[first[begin]]
        near = cells[cells != own]
        if np.isfinite(counted.high_um):
            offsets = soma_offsets(circuit, np.full(near.size, own), near)
            near = near[np.linalg.norm(offsets, axis=1) <= counted.high_um]
        if near.size < 2:
            out[begin:end] = -1
            continue
        second = (draws[begin:end, 1] * near.size).astype(int)
        third = (draws[begin:end, 2] * (near.size - 1)).astype(int)
        out[begin:end, 1] = near[second]
        out[begin:end, 2] = near[third + (third >= second)]
    out = out[out[:, 0] >= 0]
    if np.isfinite(counted.high_um):
        offsets = soma_offsets(circuit, out[:, 1], out[:, 2])
        out = out[np.linalg.norm(offsets, axis=1) <= counted.high_um]
    return out


def _runs(values: np.ndarray):
    """Yield begin and end of every run of equal sorted values."""
    edges = np.flatnonzero(np.diff(values)) + 1
    bounds = [0, *edges.tolist(), values.size]
    return zip(bounds[:-1], bounds[1:], strict=True)


def _ties(circuit: AuditCircuit, a, b) -> np.ndarray:
    there, back = circuit.connected(a, b), circuit.connected(b, a)
    return np.select([there & back, there, back], [MUTUAL, SENDS, RECEIVES], NULL)


def class_shares(circuit: AuditCircuit, triples: np.ndarray) -> np.ndarray:
    """Return how many of the triples are of each class, (16,)."""
    a, b, c = triples.T
    code = 16 * _ties(circuit, a, b) + 4 * _ties(circuit, b, c) + _ties(circuit, a, c)
    return np.bincount(_CLASS_OF_TIES[code], minlength=len(CLASSES))


def null_shares(circuit: AuditCircuit, triples: np.ndarray) -> np.ndarray:
    """Return the expected shares of the classes at the triples' distances, (16,)."""
    pairs = [(triples[:, x], triples[:, y]) for x, y in ((0, 1), (1, 2), (0, 2))]
    bins = []
    for a, b in pairs:
        away = np.zeros(a.size)
        if circuit.has_positions:
            away = np.linalg.norm(soma_offsets(circuit, a, b), axis=1)
        bins.append((away / _BIN_UM).astype(int))
    flat = np.concatenate(bins)
    seen = sum(
        np.concatenate([circuit.connected(*pair[::way]) for pair in pairs])
        for way in (1, -1)
    )
    p = np.bincount(flat, seen) / np.maximum(2 * np.bincount(flat), 1)
    chances = []
    for place in bins:
        q = p[place]
        chances.append(np.stack([q * (1 - q), q * (1 - q), q * q, (1 - q) ** 2]))
    joint = np.einsum("xn,yn,zn->xyz", *chances).reshape(-1) / len(triples)
    return np.bincount(_CLASS_OF_TIES, joint, minlength=len(CLASSES))
