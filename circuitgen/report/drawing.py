"""Arbors thinned to about a thousand points, and put into their place."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from circuitgen.core.errors import InputError
from circuitgen.core.files import sha256_of
from circuitgen.morphology import Arbor, build_arbor, read_reconstruction
from circuitgen.morphology.arbor import Kind
from circuitgen.report.source import RunTables

MOST_POINTS = 1200
_TOLERANCES_UM = (1.0, 2.0, 4.0, 8.0)


class ArborShelf:
    """Reads reconstructions named by a run's provenance, while they are unchanged."""

    def __init__(self, run: RunTables):
        self._run = run
        self._files: dict[str, list[str]] = {}
        for file in run.provenance["inputs_sha256"]:
            if file.lower().endswith(".swc"):
                self._files.setdefault(Path(file).stem, []).append(file)
        self._arbors: dict[tuple[str, int], Arbor | None] = {}

    def arbor(self, cell: int) -> Arbor | None:
        """Return a cell's arbor; None where its file is gone, changed or unclear."""
        cells = self._run.cells
        key = (cells.morphology[cell], int(cells.type_index[cell]))
        if key not in self._arbors:
            self._arbors[key] = self._read(*key)
        return self._arbors[key]

    def _read(self, name: str, type_index: int) -> Arbor | None:
        files = self._files.get(name, [])
        if len(files) != 1:
            return None
        path, wanted = Path(files[0]), self._run.provenance["inputs_sha256"][files[0]]
        spec = self._run.spec
        entry = spec["cell_types"][self._run.type_names[type_index]]
        rules = spec.get("appositions") or {}
        try:
            if sha256_of(path) != wanted:
                return None
            return build_arbor(
                read_reconstruction(path),
                upright=entry.get("upright", "y"),
                min_spacing_um=rules.get("min_spacing_um", 4.0),
                ais_um=entry.get("ais_um", 40.0),
            )
        except (OSError, InputError):
            return None


def placed(run: RunTables, cell: int, local_um: np.ndarray) -> np.ndarray:
    """Turn points of a cell's own frame into the circuit's, shape (n, 3)."""
    angle = np.deg2rad(run.cells.azimuth_deg[cell])
    cosine, sine = np.cos(angle), np.sin(angle)
    x, y, z = local_um.T
    turned = np.column_stack([cosine * x - sine * y, sine * x + cosine * y, z])
    return turned + run.cells.position_um[cell]


def _courses(arbor: Arbor) -> list[np.ndarray]:
    """Return the segments of each unbranched stretch of one kind, in order."""
    children = np.bincount(arbor.parent[arbor.parent >= 0], minlength=arbor.segments_n)
    parent = arbor.parent
    follows = parent >= 0
    follows &= (children[parent] == 1) & (arbor.kind[parent] == arbor.kind)
    # Segments lie in order along their stretch, but not always one beside the next.
    ahead = np.full(arbor.segments_n, -1)
    ahead[parent[follows]] = np.flatnonzero(follows)
    out = []
    for head in np.flatnonzero(~follows & (arbor.kind != Kind.SOMA)).tolist():
        own = [head]
        while ahead[own[-1]] >= 0:
            own.append(int(ahead[own[-1]]))
        out.append(np.array(own))
    return out


def _kept(points: np.ndarray, tolerance_um: float) -> np.ndarray:
    """Thin a line by Ramer (1972) and Douglas & Peucker (1973); return kept rows."""
    keep, stack = {0, len(points) - 1}, [(0, len(points) - 1)]
    while stack:
        low, high = stack.pop()
        if high - low < 2:
            continue
        base, way = points[low], points[high] - points[low]
        inner = points[low + 1 : high] - base
        length = way @ way
        along = np.clip(inner @ way / length, 0, 1) if length else np.zeros(len(inner))
        off = np.linalg.norm(inner - along[:, None] * way, axis=1)
        worst = int(off.argmax())
        if off[worst] > tolerance_um:
            middle = low + 1 + worst
            keep.add(middle)
            stack += [(low, middle), (middle, high)]
    return np.array(sorted(keep))


def thin_lines(arbor: Arbor) -> list[tuple[int, np.ndarray]]:
    """Return (kind, points (k, 3)) of an arbor's neurites, in its own frame.

    The finest of a few tolerances that leaves no more than `MOST_POINTS`, else the
    coarsest: every branch keeps its two ends.
    """
    whole = []
    for own in _courses(arbor):
        points = np.vstack([arbor.start_um[own[:1]], arbor.end_um[own]])
        whole.append((int(arbor.kind[own[0]]), points))
    for tolerance in _TOLERANCES_UM:
        lines = [(kind, points[_kept(points, tolerance)]) for kind, points in whole]
        if sum(len(points) for _, points in lines) <= MOST_POINTS:
            break
    return lines


def drawn_cell(run: RunTables, shelf: ArborShelf, cell: int, shift_um=None):
    """Return one cell for the page: lines in place, rounded to a micrometre; or None."""
    arbor = shelf.arbor(cell)
    if arbor is None:
        return None
    shift = np.zeros(3) if shift_um is None else shift_um
    lines = [
        [kind, np.rint(placed(run, cell, points) + shift).astype(int).ravel().tolist()]
        for kind, points in thin_lines(arbor)
    ]
    soma = np.rint(run.cells.position_um[cell] + shift).astype(int).tolist()
    return {
        "cell_id": int(cell),
        "type": int(run.cells.type_index[cell]),
        "morphology": run.cells.morphology[cell],
        "soma": soma,
        "soma_radius_um": round(arbor.soma_radius_um, 1),
        "lines": lines,
    }
