"""From a reconstruction to an Arbor: sections, corners, equal parts.

The same neuron gives the same segments however its file is sampled, numbered or
ordered: sections run between soma, branch points, changes of kind and tips; only their
corners count; branches are ordered by where they end.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from circuitgen.morphology.arbor import Arbor, Kind
from circuitgen.morphology.reconstruction import Reconstruction
from circuitgen.morphology.simplify import corners

_TINY_UM = 1e-9
# Rows of the turn that brings the named axis of a file up to z.
_UPRIGHT = {
    "x": ((0, 1, 0), (0, 0, 1), (1, 0, 0)),
    "y": ((1, 0, 0), (0, 0, -1), (0, 1, 0)),
    "z": ((1, 0, 0), (0, 1, 0), (0, 0, 1)),
    "-x": ((0, 1, 0), (0, 0, -1), (-1, 0, 0)),
    "-y": ((1, 0, 0), (0, 0, 1), (0, -1, 0)),
    "-z": ((1, 0, 0), (0, -1, 0), (0, 0, -1)),
}


@dataclass(frozen=True)
class _Section:
    """Samples of one unbranched stretch, the sample (or soma) before it included.

    `points_um` and `radii_um` have one row more than `samples` unless the section
    begins after a gap, over which the path runs on for `gap_um`.
    """

    samples: np.ndarray
    points_um: np.ndarray
    radii_um: np.ndarray
    gap_um: float


@dataclass(frozen=True)
class _Spheres:
    """The soma as spheres about the ends of its capsules."""

    center_um: np.ndarray
    radius_um: np.ndarray

    def gap_um(self, point: np.ndarray) -> float:
        """Distance of a point from the surface, 0 inside."""
        away = np.linalg.norm(self.center_um - point, axis=1) - self.radius_um
        return max(float(away.min()), 0.0)

    def inside_um(self, points: np.ndarray, along: np.ndarray) -> float:
        """Length of a course, from its first point, until it leaves the spheres."""
        for start, step, low, length in zip(
            points[:-1], np.diff(points, axis=0), along, np.diff(along), strict=False
        ):
            if length == 0:
                continue
            # Where the straight line enters and leaves each sphere.
            way, offset = step / length, start - self.center_um
            middle = -offset @ way
            square = middle**2 - (offset**2).sum(axis=1) + self.radius_um**2
            half = np.sqrt(np.maximum(square, 0.0))
            here = 0.0
            while here < length - _TINY_UM:
                reach = (middle - half <= here + _TINY_UM) & (middle + half > here)
                leave = (middle + half)[reach & (square > 0)].max(initial=here)
                if leave <= here + _TINY_UM:
                    return float(low + here)
                here = leave
        return float(along[-1])


def _children(parent: np.ndarray) -> dict[int, list[int]]:
    children: dict[int, list[int]] = {}
    for sample, above in enumerate(parent.tolist()):
        children.setdefault(above, []).append(sample)
    return children


def _run(start: int, kind: np.ndarray, bridged, children) -> list[int]:
    """Follow a section from its first sample to the branch, change or tip at its end."""
    run = [start]
    while True:
        following = children.get(run[-1], ())
        if len(following) != 1:
            return run
        child = following[0]
        if kind[child] != kind[start] or bridged[child]:
            return run
        run.append(child)


def _section(
    r: Reconstruction, points: np.ndarray, soma: _Spheres, run: list[int]
) -> _Section:
    samples = np.array(run)
    first = run[0]
    above = r.parent[first]
    own, radii = points[samples], r.radius_um[samples]
    if r.bridged[first]:
        gap = (
            float(np.linalg.norm(own[0] - points[above]))
            if above >= 0
            else soma.gap_um(own[0])
        )
        return _Section(samples, own, radii, gap)
    same = above >= 0 and r.kind[above] == r.kind[first]
    before = points[above if above >= 0 else r.kind.size + first]
    radius = r.radius_um[above] if same else radii[0]
    return _Section(
        samples, np.vstack([before, own]), np.concatenate([[radius], radii]), 0.0
    )


def _sections(
    r: Reconstruction, points: np.ndarray, soma: _Spheres
) -> Iterator[tuple[_Section, int]]:
    """Yield sections from the soma outward with the sample that each continues."""
    children, where = _children(r.parent), np.round(points, 6)

    def ordered(starts: list[int]) -> list[list[int]]:
        runs = [_run(start, r.kind, r.bridged, children) for start in starts]
        return sorted(runs, key=lambda run: (int(r.kind[run[0]]), *where[run[-1]]))

    pending = [(run, -1) for run in reversed(ordered(children.get(-1, [])))]
    while pending:
        run, above = pending.pop()
        yield _section(r, points, soma, run), above
        following = ordered(children.get(run[-1], []))
        pending += [(child, run[-1]) for child in reversed(following)]


def _begin_after(section: _Section, along: np.ndarray, skip: float):
    """Cut the first `skip` um off a section's points, radii and lengths."""
    points, radii = section.points_um, section.radii_um
    if skip <= 0:
        return points, radii, along
    first = int(np.searchsorted(along, skip + _TINY_UM, side="right"))
    if first == along.size:
        return points[:0], radii[:0], along[:0]
    share = (skip - along[first - 1]) / (along[first] - along[first - 1])
    edge = points[first - 1] + share * (points[first] - points[first - 1])
    radius = radii[first - 1] + share * (radii[first] - radii[first - 1])
    return (
        np.vstack([edge, points[first:]]),
        np.concatenate([[radius], radii[first:]]),
        np.concatenate([[skip], along[first:]]),
    )


def _along_course(points: np.ndarray, kept: np.ndarray) -> np.ndarray:
    """Where points stand on the straight pieces between kept ones, in um from the start.

    Every point stands where it is nearest, but never before the point before it.
    """
    chord = np.diff(points[kept], axis=0)
    square = (chord**2).sum(axis=1)
    which = np.searchsorted(kept, np.arange(len(points)), side="right") - 1
    which = np.minimum(which, len(chord) - 1)
    away = points - points[kept][which]
    part = (away * chord[which]).sum(axis=1) / np.where(square > 0, square, 1.0)[which]
    part = np.clip(part, 0.0, 1.0)
    part[-1] = 1.0
    part = np.maximum.accumulate(which + part) - which
    length = np.sqrt(square)
    return (np.cumsum(length) - length)[which] + part * length[which]


def _piece_bounds(along: np.ndarray, skip: float, course: np.ndarray) -> np.ndarray:
    """Coordinates of a section's samples: those on the course, before it by length."""
    if skip <= 0:
        return course
    first = along.size - course.size + 1
    inside, outside = skip - along[first - 1], along[first] - skip
    # The piece that leaves the soma keeps its proportions.
    before = along[:first] - along[first - 1] - inside / outside * course[1]
    return np.concatenate([before, course[1:]])


def _cut(low: float, high: float, length: float, spacing: float, stop: float):
    """Fractions (0 to 1) at which a straight piece from path low to high is cut."""
    bounds = [0.0, 1.0]
    if low < stop < high:
        bounds.insert(1, (stop - low) / (high - low))
    cuts = [0.0]
    for a, b in zip(bounds[:-1], bounds[1:], strict=True):
        parts = max(math.ceil((b - a) * length / spacing - 1e-9), 1)
        cuts += [a + (b - a) * (k + 1) / parts for k in range(parts)]
    return cuts


def _cut_all(path, length, spacing: float, stop: float):
    """Cut every straight piece; return its index and both fractions by segment."""
    cuts = [
        _cut(low, high, span, spacing, stop) if span > 0 else [0.0]
        for low, high, span in zip(
            path[:-1].tolist(), path[1:].tolist(), length.tolist(), strict=True
        )
    ]
    which = np.repeat(np.arange(len(cuts)), [len(cut) - 1 for cut in cuts])
    begin = np.array([f for cut in cuts for f in cut[:-1]])
    end = np.array([f for cut in cuts for f in cut[1:]])
    return which, begin, end


class _Builder:
    """Collects segments and pieces of the file, section by section."""

    def __init__(self, r: Reconstruction, soma: _Spheres, spacing_um, ais_um):
        self.r, self.soma = r, soma
        self.spacing_um, self.ais_um = spacing_um, ais_um
        self.rows: list[tuple[np.ndarray, ...]] = []
        self.piece_number: list[np.ndarray] = []
        self.piece_backward: list[np.ndarray] = []
        self.piece_length: list[np.ndarray] = []
        self.cable_um, self.pieces_n, self.segments_n = 0.0, 0, 0
        self.path_at = np.zeros(r.kind.size)
        self.within = np.zeros(r.kind.size, bool)
        self.last_segment = np.full(r.kind.size, -1, np.int64)

    def _note_pieces(self, numbers, backward, lengths) -> None:
        self.piece_number.append(numbers)
        self.piece_backward.append(backward)
        self.piece_length.append(lengths)
        self.pieces_n += len(numbers)
        self.cable_um += float(lengths.sum())

    def _add(self, *columns: np.ndarray) -> None:
        self.rows.append(columns)
        self.segments_n += len(columns[0])

    def add_soma(self, start: np.ndarray, end: np.ndarray) -> None:
        """Add the soma's capsules, one piece of the file each."""
        soma, n = self.r.soma, len(start)
        lengths = np.linalg.norm(end - start, axis=1)
        bounds = np.concatenate([[0.0], np.cumsum(lengths)])
        zeros, pieces = np.zeros(n), np.arange(n)
        self._note_pieces(soma.number, np.zeros(n, bool), lengths)
        self._add(
            start, end, soma.radius_um, soma.radius_um, np.full(n, Kind.SOMA),
            np.full(n, -1), np.zeros(n, bool), zeros, zeros, bounds[:-1], bounds[1:],
            pieces, pieces,
        )  # fmt: skip

    def add_section(self, section: _Section, above: int) -> None:
        """Add one section: its pieces of the file, then its segments."""
        r = self.r
        steps = np.diff(section.points_um, axis=0)
        lengths = np.linalg.norm(steps, axis=1)
        along = np.concatenate([[0.0], np.cumsum(lengths)])
        skip = 0.0
        if above < 0 or self.within[above]:
            skip = self.soma.inside_um(section.points_um, along)
        path = self.path_at[above] if above >= 0 else 0.0
        path += section.gap_um - skip
        at = along[-len(section.samples) :]
        self.path_at[section.samples] = np.maximum(path + at, 0.0)
        self.within[section.samples] = at < skip + _TINY_UM if skip else False
        parent = self.last_segment[above] if above >= 0 else -1
        before = self.segments_n
        bounds = self._add_segments(section, along, skip, path, parent)
        own = section.samples[len(section.samples) - len(lengths) :]
        self._note_pieces(r.piece[own], r.backward[own], np.diff(bounds))
        grown = self.segments_n > before
        self.last_segment[section.samples] = self.segments_n - 1 if grown else parent

    def _add_segments(self, section, along, skip, path, parent) -> np.ndarray:
        """Add a section's segments; return where its samples stand along them."""
        points, radii, inner = _begin_after(section, along, skip)
        if len(points) < 2:
            return along
        kept = corners(points, radii)
        bounds = _piece_bounds(along, skip, _along_course(points, kept))
        points, radii, inner = points[kept], radii[kept], inner[kept]
        chord, widen = np.diff(points, axis=0), np.diff(radii)
        kind = self.r.kind[section.samples[0]]
        stop = self.ais_um if kind == Kind.AXON else -1.0
        from_soma = path + inner
        length = np.sqrt((chord**2).sum(axis=1))
        which, begin, end = _cut_all(from_soma, length, self.spacing_um, stop)
        n = which.size
        if n == 0:
            return bounds
        low, span = from_soma[which], np.diff(inner)[which]
        path_begin, path_end = low + begin * span, low + end * span
        low = (np.cumsum(length) - length)[which]
        course_begin, course_end = low + begin * length[which], low + end * length[which]
        last = len(along) - 2
        first_piece = np.searchsorted(bounds, course_begin, side="right") - 1
        first_piece = np.minimum(np.maximum(first_piece, 0), last)
        last_piece = np.searchsorted(bounds, course_end, side="left") - 1
        last_piece = np.minimum(np.maximum(last_piece, first_piece), last)
        base = self.cable_um - bounds[0]
        self._add(
            points[which] + begin[:, None] * chord[which],
            points[which] + end[:, None] * chord[which],
            radii[which] + begin * widen[which],
            radii[which] + end * widen[which],
            np.full(n, kind),
            np.concatenate([[parent], self.segments_n + np.arange(n - 1)]),
            path_end <= stop + 1e-9,
            path_begin,
            path_end,
            base + course_begin,
            base + course_end,
            self.pieces_n + first_piece,
            self.pieces_n + last_piece,
        )
        return bounds

    def arbor(self) -> Arbor:
        """Join everything."""
        columns = [np.concatenate(part) for part in zip(*self.rows, strict=True)]
        lengths = np.concatenate(self.piece_length)
        types = (
            float, float, float, float, np.int8, np.int32, bool, float, float, float,
            float, np.int32, np.int32,
        )  # fmt: skip
        return Arbor(
            self.r.name,
            *(c.astype(t) for c, t in zip(columns, types, strict=True)),
            piece_number=np.concatenate(self.piece_number),
            piece_backward=np.concatenate(self.piece_backward),
            piece_bounds_um=np.concatenate([[0.0], np.cumsum(lengths)]),
        )


def build_arbor(
    reconstruction: Reconstruction,
    *,
    upright: str,
    min_spacing_um: float,
    ais_um: float,
) -> Arbor:
    """Turn a reconstruction into capsules, soma centre at the origin, pia toward z.

    Parameters
    ----------
    reconstruction : Reconstruction
        From `read_reconstruction`.
    upright : str
        The file's axis toward the pia, ``x`` to ``-z``.
    min_spacing_um : float
        No segment is longer.
    ais_um : float
        Path length from the soma up to which axon is axon initial segment.
    """
    r, turn = reconstruction, np.array(_UPRIGHT[upright], float).T
    center = r.soma.center_um
    # Samples first, then the point at which each would leave the soma.
    points = np.vstack([r.position_um - center, r.stem_um - center]) @ turn
    start, end = (r.soma.start_um - center) @ turn, (r.soma.end_um - center) @ turn
    soma = _Spheres(np.vstack([start, end]), np.tile(r.soma.radius_um, 2))
    builder = _Builder(r, soma, min_spacing_um, ais_um)
    builder.add_soma(start, end)
    for section, above in _sections(r, points, soma):
        builder.add_section(section, above)
    return builder.arbor()
