"""Joining pieces of a neuron that its file leaves loose; `reconstruction` has the rules.

A loose piece is a tree without soma: cable that sectioning or tracing has cut off.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
from scipy.spatial import cKDTree

from circuitgen.core.errors import InputError, Problem
from circuitgen.morphology.arbor import Kind
from circuitgen.morphology.capsules import feet
from circuitgen.morphology.findings import Findings, count_of
from circuitgen.morphology.samples import Samples
from circuitgen.morphology.soma import JOIN_TO_SOMA_UM, soma_capsules
from circuitgen.morphology.trees import children_n, root_of

JOIN_LOOSE_UM = 50.0
MOST_LOOSE = 1_000
_POINTS_EVERY_UM = 5.0


def join_loose(path: Path, samples: Samples, findings: Findings) -> Samples:
    """Join loose pieces to the soma or to cable, or drop them.

    Raises
    ------
    InputError
        If more pieces are loose than a tracing can have.
    """
    samples = _drop_lone(samples, findings)
    roots = _loose_roots(samples)
    if not roots.size:
        return samples
    if roots.size > MOST_LOOSE:
        line = int(samples.line[roots].min())
        rule = f"begins one of {roots.size} loose pieces; more than {MOST_LOOSE} are "
        raise InputError([Problem(str(path), line, "", rule + "not one neuron's cable")])
    samples = _join_to_soma(samples, roots, findings)
    if _loose_roots(samples).size:
        samples = _join_to_cable(samples, findings)
    return samples.ordered()


def _loose_roots(samples: Samples) -> np.ndarray:
    return np.flatnonzero((samples.parent < 0) & (samples.kind != Kind.SOMA))


def _drop_lone(samples: Samples, findings: Findings) -> Samples:
    """Leave out samples without parent and children."""
    lone = (samples.parent < 0) & (children_n(samples.parent) == 0)
    lone &= samples.kind != Kind.SOMA
    text = "{n} without parent and children left out; they have no cable"
    findings.repair("lone", text, samples.line[lone])
    return samples.taken(np.flatnonzero(~lone)) if lone.any() else samples


def _join_to_soma(samples: Samples, roots: np.ndarray, findings: Findings) -> Samples:
    """Join the roots on, in or beside the soma to it."""
    soma, rows = soma_capsules(samples)
    points = samples.position_um[roots]
    outside = soma.outside_um(points)
    near = outside <= JOIN_TO_SOMA_UM
    joint, which = soma.on_surface(points)
    parent, begin = samples.parent.copy(), samples.begin_um.copy()
    bridged = samples.bridged.copy()
    joined = roots[near]
    parent[joined], begin[joined] = rows[which[near]], joint[near]
    bridged[joined] = True
    apart = joined[outside[near] > 0]
    pieces = count_of(apart.size, "piece")
    text = f"{pieces} beginning within {JOIN_TO_SOMA_UM:g} um of the soma's surface "
    text += "joined to it; path lengths run on across the gap"
    findings.repair("soma_joined", text, samples.line[apart])
    return replace(samples, parent=parent, begin_um=begin, bridged=bridged)


class _Ends:
    """Ends of the loose pieces, and the nearest cable found so far for each."""

    def __init__(self, samples: Samples):
        self.tree = root_of(samples.parent)
        loose = samples.parent[self.tree] < 0
        loose &= samples.kind[self.tree] != Kind.SOMA
        is_end = (samples.parent < 0) | (children_n(samples.parent) == 0)
        self.loose = loose
        self.row = np.flatnonzero(loose & is_end)
        self.is_axon = samples.kind[self.row] == Kind.AXON
        self.away_um = np.full(self.row.size, np.inf)
        self.host = np.full(self.row.size, -1)
        self.joint_um = np.zeros((self.row.size, 3))
        self.waiting = np.ones(self.row.size, bool)

    def look_at(self, samples: Samples, cable: np.ndarray, chosen: np.ndarray) -> None:
        """Measure waiting ends in `chosen` from the pieces that end at rows `cable`."""
        chosen = np.flatnonzero(chosen & self.waiting)
        if not chosen.size or not cable.size:
            return
        points = samples.position_um[self.row[chosen]]
        away, host, joint = _nearest_cable(samples, cable, points)
        self.keep_nearer(chosen, away, host, joint)

    def keep_nearer(self, chosen, away, host, joint) -> None:
        """Keep what lies nearer than the best so far."""
        nearer = away < self.away_um[chosen]
        rows = chosen[nearer]
        self.away_um[rows], self.host[rows] = away[nearer], host[nearer]
        self.joint_um[rows] = joint[nearer]


def _nearest_cable(samples: Samples, cable: np.ndarray, points: np.ndarray):
    """Nearest point of cable for each point: distance, row that ends the piece, place.

    The distance is infinite beyond `JOIN_LOOSE_UM`.
    """
    start, end = samples.begin_um[cable], samples.position_um[cable]
    start = np.where(samples.bridged[cable][:, None], end, start)
    parts = np.linalg.norm(end - start, axis=1) // _POINTS_EVERY_UM + 1
    owner = np.repeat(np.arange(cable.size), parts.astype(np.int64) + 1)
    order = np.arange(owner.size) - np.searchsorted(owner, owner)
    share = (order / parts[owner])[:, None]
    tree = cKDTree(start[owner] + share * (end - start)[owner])
    coarse, _ = tree.query(points, distance_upper_bound=JOIN_LOOSE_UM + _POINTS_EVERY_UM)
    away, host = np.full(len(points), np.inf), np.full(len(points), -1)
    joint = np.zeros((len(points), 3))
    for i in np.flatnonzero(np.isfinite(coarse)).tolist():
        near = tree.query_ball_point(points[i], coarse[i] + _POINTS_EVERY_UM)
        pieces = np.unique(owner[near])
        part = feet(points[i], start[pieces], end[pieces])[:, None]
        places = start[pieces] + part * (end - start)[pieces]
        distance = np.linalg.norm(places - points[i], axis=1)
        best = int(distance.argmin())
        if distance[best] <= JOIN_LOOSE_UM:
            away[i], host[i], joint[i] = (
                distance[best],
                cable[pieces[best]],
                places[best],
            )
    return away, host, joint


def _join_to_cable(samples: Samples, findings: Findings) -> Samples:
    """Join loose pieces by their nearest ends, nearest pieces first; drop the rest."""
    ends = _Ends(samples)
    attached = ~ends.loose & (samples.kind != Kind.SOMA)
    is_axon = samples.kind == Kind.AXON
    for axon in (True, False):
        own = attached & (is_axon == axon)
        if own.any():
            ends.look_at(samples, np.flatnonzero(own), ends.is_axon == axon)
        else:
            ends.look_at(samples, np.flatnonzero(attached), ends.is_axon == axon)
            _look_at_soma(samples, ends, ends.is_axon == axon)
    tree, joined = ends.tree, []
    while np.isfinite(best := ends.away_um[ends.waiting].min(initial=np.inf)):
        end = int(np.flatnonzero(ends.waiting & (ends.away_um == best))[0])
        row, root = int(ends.row[end]), int(tree[ends.row[end]])
        samples = samples.rooted_at(row) if row != root else samples
        samples = _bridge(samples, row, int(ends.host[end]), ends.joint_um[end])
        ends.waiting[tree[ends.row] == root] = False
        joined.append((root, best))
        own = tree == root
        for axon in (True, False):
            cable = np.flatnonzero(own & (is_axon == axon))
            ends.look_at(samples, cable, ends.is_axon == axon)
    dropped = np.unique(tree[ends.row[ends.waiting]])
    _report(samples, tree, joined, dropped, findings)
    return samples.taken(np.flatnonzero(~np.isin(tree, dropped)))


def _look_at_soma(samples: Samples, ends: _Ends, chosen: np.ndarray) -> None:
    """Measure ends from the soma's surface."""
    chosen = np.flatnonzero(chosen)
    if not chosen.size:
        return
    soma, rows = soma_capsules(samples)
    points = samples.position_um[ends.row[chosen]]
    joint, which = soma.on_surface(points)
    away = np.linalg.norm(points - joint, axis=1)
    away[away > JOIN_LOOSE_UM] = np.inf
    ends.keep_nearer(chosen, away, rows[which], joint)


def _bridge(samples: Samples, row: int, host: int, joint: np.ndarray) -> Samples:
    """Join the root of a loose piece to a point of cable."""
    parent, begin = samples.parent.copy(), samples.begin_um.copy()
    bridged = samples.bridged.copy()
    parent[row], begin[row], bridged[row] = host, joint, True
    return replace(samples, parent=parent, begin_um=begin, bridged=bridged)


def _report(samples: Samples, tree, joined, dropped, findings: Findings) -> None:
    length = np.where(samples.bridged, 0.0, samples.length_um)

    def told(roots) -> tuple[str, np.ndarray]:
        cable_um = length[np.isin(tree, roots)].sum()
        pieces = count_of(len(roots), "loose piece")
        return f"{pieces} ({cable_um:.0f} um of cable)", samples.line[roots]

    if joined:
        kept, lines = told([root for root, _ in joined])
        widest = max(gap for _, gap in joined)
        text = f"{kept} kept across gaps of up to {widest:.0f} um; path lengths run on "
        findings.repair("loose_kept", text + "across the gaps", lines)
    if dropped.size:
        lost, lines = told(dropped)
        text = f"{lost} farther than {JOIN_LOOSE_UM:g} um from cable of their kind "
        findings.warn("loose_dropped", text + "left out; they contact nobody", lines)
