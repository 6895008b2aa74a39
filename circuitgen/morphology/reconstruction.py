"""A reconstruction fit for use: kinds settled, soma found, loose pieces joined.

Rules, each counted in the findings when it is used:

- Types 0, 5, 6 and above 7 take the kind of the nearest ancestor that is axon, basal or
  apical dendrite; without one they are basal dendrite. Glia (7) is left out.
- Soma: one sample is a sphere; three samples by the three-point convention (two
  children of the first, all of one radius) are a sphere; a contour (samples thin against
  their distance from the middle) is a sphere of the mean distance; anything else is
  taken as the capsules given. Without a soma one is made at the root of the largest
  tree, with the root's radius but at least 3 um.
- A tree that the file roots elsewhere is rooted at its soma.
- A root that is not soma is joined to the soma when it lies within 10 um of the soma's
  surface. Other loose pieces are kept when their root lies within 50 um of the joined
  cable; farther ones are dropped. Path length runs on across a gap, cable does not.
- A radius of zero or less takes the nearest ancestor's, or 0.1 um.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from pathlib import Path

import numpy as np
from scipy.spatial import cKDTree

from circuitgen.core.errors import InputError, Problem
from circuitgen.morphology.arbor import Kind
from circuitgen.morphology.swc import Samples, order_from_roots, read_samples

JOIN_TO_SOMA_UM = 10.0
JOIN_LOOSE_UM = 50.0
_LEAST_RADIUS_UM = 0.1
_LEAST_MADE_SOMA_UM = 3.0
_GLIA = 7
_NEURITES = (Kind.AXON, Kind.BASAL, Kind.APICAL)
_NANOMETRE_EXTENT_UM = 20_000.0
_VOXEL_EXTENT_UM = 25.0


@dataclass(frozen=True)
class Finding:
    """A repair that was made or a thing to look at; `line` is None for whole files."""

    severity: str
    text: str
    count: int
    line: int | None


@dataclass(frozen=True)
class Soma:
    """Capsules of the soma (k rows) and its centre, in the file's own frame."""

    center_um: np.ndarray
    start_um: np.ndarray
    end_um: np.ndarray
    radius_um: np.ndarray
    number: np.ndarray


@dataclass(frozen=True)
class Reconstruction:
    """Neurites of one file, parents before children, and the soma.

    n samples. `parent` is an index, -1 where the sample leaves the soma from
    `stem_um`; `bridged` marks samples whose gap to the parent, or to the soma, is no
    cable. `piece` and
    `backward` lead from the piece before a sample to the file, as in `Samples`.
    """

    name: str
    piece: np.ndarray
    backward: np.ndarray
    kind: np.ndarray
    position_um: np.ndarray
    radius_um: np.ndarray
    parent: np.ndarray
    stem_um: np.ndarray
    bridged: np.ndarray
    soma: Soma
    file_cable_um: float
    findings: tuple[Finding, ...]


class _Intake:
    """Applies the rules one after another and keeps count."""

    def __init__(self, samples: Samples):
        self.samples = samples
        self.findings: list[Finding] = []

    def find(self, severity: str, text: str, where: np.ndarray | None = None) -> None:
        """Note a finding, for the samples in the mask `where` if any."""
        if where is None:
            self.findings.append(Finding(severity, text, 1, None))
        elif where.any():
            line = int(self.samples.line[where].min())
            self.findings.append(Finding(severity, text, int(where.sum()), line))

    def take(self, rows: np.ndarray) -> None:
        """Keep the samples in `rows`, in that order; orphans become roots."""
        s, rank = self.samples, np.full(self.samples.kind.size + 1, -1)
        rank[rows] = np.arange(rows.size)
        arrays = {
            field.name: getattr(s, field.name)[rows]
            for field in fields(s)
            if field.name not in ("parent", "odd_roots")
        }
        self.samples = replace(s, parent=rank[s.parent[rows]], **arrays)

    def root_at_soma(self) -> None:
        s = self.samples
        somata = np.flatnonzero(s.kind == Kind.SOMA)
        if not somata.size or s.parent[somata[0]] < 0:
            return
        self.find("repair", "tree rooted at its soma, not where the file has its root")
        parent, piece, backward = s.parent.copy(), s.piece.copy(), s.backward.copy()
        node, before = int(somata[0]), -1
        while node >= 0:
            above = int(s.parent[node])
            parent[node] = before
            if before >= 0:
                piece[node], backward[node] = s.number[before], True
            node, before = above, node
        self.samples = replace(s, parent=parent, piece=piece, backward=backward)
        self.take(order_from_roots(parent))

    def settle_kinds(self) -> None:
        glia = self.samples.kind == _GLIA
        self.find("repair", "samples of glia left out", glia)
        self.take(np.flatnonzero(~glia))
        kind = self.samples.kind.copy()
        unknown = ~np.isin(kind, [Kind.SOMA, *_NEURITES])
        self.find("repair", "samples of unknown type take their ancestor's", unknown)
        for i in np.flatnonzero(unknown):
            above = self.samples.parent[i]
            known = above >= 0 and kind[above] != Kind.SOMA
            kind[i] = kind[above] if known else Kind.BASAL
        self.samples = replace(self.samples, kind=kind)

    def mend_radii(self) -> None:
        radius = self.samples.radius_um.copy()
        bad = radius <= 0
        self.find("repair", "radii of zero or less take their ancestor's", bad)
        for i in np.flatnonzero(bad):
            above = self.samples.parent[i]
            usable = above >= 0 and self.samples.kind[above] == self.samples.kind[i]
            radius[i] = radius[above] if usable else _LEAST_RADIUS_UM
        self.samples = replace(self.samples, radius_um=radius)

    def note_oddities(self) -> None:
        s = self.samples
        if s.odd_roots:
            self.find("repair", f"{s.odd_roots} roots marked by something else than -1")
        doubled = np.zeros(s.kind.size, bool)
        child = s.parent >= 0
        doubled[child] = (s.position_um[child] == s.position_um[s.parent[child]]).all(
            axis=1
        )
        doubled &= s.kind != Kind.SOMA
        self.find("repair", "doubled points merged", doubled)

    def warn(self, kinds: set[int]) -> None:
        s = self.samples
        if Kind.AXON not in kinds:
            self.find("warning", "no axon: the cell contacts nobody")
        if not kinds & {Kind.BASAL, Kind.APICAL}:
            self.find("warning", "no dendrite: only the soma can be contacted")
        if not s.kind.size:
            return
        extent = float(np.ptp(s.position_um, axis=0).max())
        if extent > _NANOMETRE_EXTENT_UM:
            text = f"extent {extent:.0f} um: are the units nanometres?"
            self.find("warning", text)
        elif extent < _VOXEL_EXTENT_UM:
            text = f"extent {extent:.3g} um: are the units voxels or millimetres?"
            self.find("warning", text)
        neurites = s.radius_um[s.kind != Kind.SOMA]
        if neurites.size > 1 and np.ptp(neurites) == 0:
            text = f"all radii are {neurites[0]:g} um: probably not measured"
            self.find("warning", text)


def _sphere(center, radius, number) -> Soma:
    center = np.asarray(center, float)
    one = center.reshape(1, 3)
    return Soma(center, one, one, np.array([radius]), np.array([number]))


def _soma_of(intake: _Intake) -> Soma:
    """Find the soma by the rules of the module."""
    s = intake.samples
    rows = np.flatnonzero(s.kind == Kind.SOMA)
    if not rows.size:
        root = _largest_tree(s.parent)
        radius = max(float(s.radius_um[root]), _LEAST_MADE_SOMA_UM)
        text = f"no soma: one of {radius:.1f} um made at the root of the largest tree"
        intake.find("warning", text)
        return _sphere(s.position_um[root], radius, s.number[root])
    points, radii = s.position_um[rows], s.radius_um[rows]
    if rows.size == 1:
        return _sphere(points[0], radii[0], s.number[rows[0]])
    three_point = (
        rows.size == 3
        and (s.parent[rows[1:]] == rows[0]).all()
        and np.ptp(radii) <= 0.01 * radii[0]
    )
    if three_point:
        return _sphere(points[0], radii[0], s.number[rows[0]])
    middle = points.mean(axis=0)
    away = float(np.linalg.norm(points - middle, axis=1).mean())
    if radii.mean() < 0.5 * away:
        intake.find("repair", f"soma contour taken as a sphere of {away:.1f} um")
        return _sphere(middle, away, s.number[rows[0]])
    above = np.where(np.isin(s.parent[rows], rows), s.parent[rows], rows)
    return Soma(middle, s.position_um[above], points, radii, s.number[rows])


def _root_of(parent: np.ndarray) -> np.ndarray:
    """Return the root of every sample; parents stand before children."""
    root = np.arange(parent.size)
    for i in np.flatnonzero(parent >= 0):
        root[i] = root[parent[i]]
    return root


def _largest_tree(parent: np.ndarray) -> int:
    return int(np.bincount(_root_of(parent)).argmax())


def _surface_gap(soma: Soma, points: np.ndarray) -> np.ndarray:
    """Distance of points from the soma's surface, by its nearest sample."""
    ends = np.concatenate([soma.start_um, soma.end_um])
    radii = np.concatenate([soma.radius_um, soma.radius_um])
    away = np.linalg.norm(points[:, None] - ends[None], axis=2) - radii
    return away.min(axis=1)


def _join_loose(intake: _Intake, soma: Soma, leaves_soma: np.ndarray):
    """Join loose pieces; return (parent, bridged, dropped) of the neurite samples."""
    s = intake.samples
    root = _root_of(s.parent)
    is_root = s.parent < 0
    gap = _surface_gap(soma, s.position_um)
    near = is_root & (leaves_soma | (gap <= JOIN_TO_SOMA_UM))
    attached = near[root]
    bridged, dropped = np.zeros(root.size, bool), np.zeros(root.size, bool)
    parent = s.parent.copy()
    # A root beside the soma has no piece of the file that leads there.
    bridged |= near & ~leaves_soma
    text = "pieces that begin beside the soma joined to it"
    intake.find("repair", text, bridged & (gap > 0))
    if attached.all():
        return parent, bridged, dropped
    tree = cKDTree(s.position_um[attached]) if attached.any() else None
    loose = np.flatnonzero(is_root & ~near)
    for piece in loose:
        away, place = np.inf, 0
        if tree is not None:
            away, place = tree.query(s.position_um[piece])
        if away <= JOIN_LOOSE_UM:
            parent[piece] = np.flatnonzero(attached)[place]
            bridged[piece] = True
        else:
            dropped |= root == piece
    _report_loose(intake, root, bridged & (parent >= 0), dropped)
    return parent, bridged, dropped


def _report_loose(intake: _Intake, root, bridged, dropped) -> None:
    s, length = intake.samples, _edge_lengths(intake.samples)
    kept = bridged[root]
    for mask, what in ((kept, "kept across gaps"), (dropped, "too far away, dropped")):
        if mask.any():
            pieces = np.unique(root[mask]).size
            text = f"{pieces} loose pieces ({length[mask].sum():.0f} um) {what}"
            line = int(s.line[mask].min())
            intake.findings.append(Finding("repair", text, pieces, line))


def _edge_lengths(s: Samples) -> np.ndarray:
    edge = s.position_um - s.position_um[s.parent]
    return np.where(s.parent >= 0, np.linalg.norm(edge, axis=1), 0.0)


def read_reconstruction(path: Path) -> Reconstruction:
    """Read an SWC file by the rules of this module.

    Raises InputError with file, line and reason when the file cannot be used.
    """
    intake = _Intake(read_samples(path))
    file_cable_um = float(_edge_lengths(intake.samples).sum())
    intake.note_oddities()
    line = int(intake.samples.line.min())
    intake.settle_kinds()
    if not intake.samples.kind.size:
        rule = "holds no sample of a neuron, only glia"
        raise InputError([Problem(str(path), line, "", rule)])
    intake.root_at_soma()
    intake.mend_radii()
    soma = _soma_of(intake)
    everything = intake.samples
    stem = np.full((everything.kind.size, 3), np.nan)
    leaves_soma = (everything.parent >= 0) & (everything.kind != Kind.SOMA)
    leaves_soma &= everything.kind[everything.parent] == Kind.SOMA
    stem[leaves_soma] = everything.position_um[everything.parent[leaves_soma]]
    neurite = everything.kind != Kind.SOMA
    intake.take(np.flatnonzero(neurite))
    intake.warn(set(intake.samples.kind.tolist()))
    parent, bridged, dropped = _join_loose_if_any(intake, soma, leaves_soma[neurite])
    stem = np.where(np.isnan(stem[neurite]), soma.center_um, stem[neurite])
    return _finish(path, intake, parent, stem, bridged, dropped, soma, file_cable_um)


def _join_loose_if_any(intake: _Intake, soma: Soma, leaves_soma: np.ndarray):
    """Join roots that the file does not connect to the soma itself."""
    s = intake.samples
    loose = (s.parent < 0) & ~leaves_soma
    if not loose.any():
        nothing = np.zeros(s.kind.size, bool)
        return s.parent, nothing, nothing
    return _join_loose(intake, soma, leaves_soma)


def _finish(path, intake, parent, stem, bridged, dropped, soma, file_cable_um):
    intake.samples = replace(intake.samples, parent=parent)
    order = order_from_roots(parent)
    order = order[~dropped[order]]
    intake.take(order)
    s = intake.samples
    arrays = {
        "piece": s.piece,
        "backward": s.backward,
        "kind": s.kind.astype(np.int8),
        "position_um": s.position_um,
        "radius_um": s.radius_um,
        "parent": s.parent,
        "stem_um": stem[order],
        "bridged": bridged[order],
    }
    for array in arrays.values():
        array.setflags(write=False)
    return Reconstruction(
        name=Path(path).stem,
        soma=soma,
        file_cable_um=file_cable_um,
        findings=tuple(intake.findings),
        **arrays,
    )
