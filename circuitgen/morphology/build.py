"""From a reconstruction to an Arbor: straight pieces between corners, in equal parts.

The same neuron gives the same segments however its file is sampled, numbered or
ordered: only the corners of a section count, and sections come in an order of their own.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from circuitgen.morphology.arbor import Arbor, Kind
from circuitgen.morphology.chords import Chords, Parts, chords_of, cut, stand_um
from circuitgen.morphology.courses import Courses, courses_of, outside_soma
from circuitgen.morphology.reconstruction import Reconstruction
from circuitgen.morphology.sections import Sections, sections_of
from circuitgen.morphology.soma import soma_capsules

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
class _Pieces:
    """The file's own pieces beside the segments, section after section.

    `row` (p,) of the reconstruction ends a piece; `bounds_um` (p + 1,) on the cable
    coordinate; `first` and `last` (k,) piece of every section; `shift_um` (k,) leads
    from length along a section's chords to the cable coordinate.
    """

    row: np.ndarray
    bounds_um: np.ndarray
    first: np.ndarray
    last: np.ndarray
    shift_um: np.ndarray


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
        Path length from the soma's surface up to which axon is axon initial segment.

    Returns
    -------
    Arbor
        The soma's capsules first, then section after section.
    """
    r = _upright(reconstruction, upright)
    sections = sections_of(r)
    whole = courses_of(r, sections, soma_capsules(r)[0])
    course, of_whole = outside_soma(whole)
    chords = chords_of(course, _lone_soma(r, course))
    pieces = _pieces_of(r, whole, course, of_whole, stand_um(course, chords))
    path = course.path_um[course.section] + course.along_um
    kind = r.kind[sections.rows[sections.first]][course.section]
    path = np.where(kind == Kind.SOMA, 0.0, np.maximum(path, 0.0))
    ends = np.column_stack([path[chords.start], path[chords.end]])
    stop = np.where(kind[chords.start] == Kind.AXON, ais_um, -1.0)
    parts = cut(chords, ends, stop, min_spacing_um)
    begin_path, end_path = (
        (1 - part) * ends[parts.chord, 0] + part * ends[parts.chord, 1]
        for part in (parts.begin, parts.end)
    )
    section = course.section[chords.start][parts.chord]
    return Arbor(
        name=r.name,
        **_geometry(course, chords, parts),
        kind=kind[chords.start][parts.chord].astype(np.int8),
        parent=_parents(r, sections, course, section, end_path),
        initial=end_path <= stop[parts.chord] + _TINY_UM,
        path_um=begin_path,
        path_end_um=end_path,
        **_cable(course, chords, parts, pieces),
        piece_number=r.piece[pieces.row],
        piece_backward=r.backward[pieces.row],
        piece_bounds_um=pieces.bounds_um,
    )


def _upright(r: Reconstruction, upright: str) -> Reconstruction:
    """Put the soma's centre at the origin, and the axis toward the pia up to z."""
    turn = np.array(_UPRIGHT[upright], float).T
    return replace(
        r,
        position_um=(r.position_um - r.soma_center_um) @ turn,
        begin_um=(r.begin_um - r.soma_center_um) @ turn,
        soma_center_um=np.zeros(3),
    )


def _lone_soma(r: Reconstruction, course: Courses) -> np.ndarray:
    """Return the points of soma samples that are joined to no other soma sample."""
    is_soma = r.kind == Kind.SOMA
    linked = is_soma & (r.parent >= 0)
    touched = linked.copy()
    touched[r.parent[linked]] = True
    return np.flatnonzero((is_soma & ~touched)[course.row] & (course.row >= 0))


def _pieces_of(
    r: Reconstruction,
    whole: Courses,
    course: Courses,
    of_whole: np.ndarray,
    stand: np.ndarray,
) -> _Pieces:
    """Lay the file's pieces beside the chords, by where their samples stand."""
    at = _stand_of_whole(whole, course, of_whole, stand)
    size = np.diff(at, prepend=at[0])
    is_piece = whole.row >= 0
    lone = np.diff(np.append(whole.first, at.size)) == 1
    # A section's first point ends no piece, but a lone soma sample stands for one.
    is_soma = r.kind[whole.row[whole.first]] == Kind.SOMA
    size[whole.first] = 0.0
    is_piece[whole.first[~(lone & is_soma)]] = False
    bounds = np.append(0.0, np.cumsum(size[is_piece]))
    count = np.append(0, np.cumsum(is_piece))
    first, last = count[whole.first], count[np.append(whole.first[1:], at.size)] - 1
    return _Pieces(
        row=whole.row[is_piece],
        bounds_um=bounds,
        first=first,
        last=last,
        shift_um=bounds[first] - at[whole.first],
    )


def _stand_of_whole(whole: Courses, course: Courses, of_whole, stand) -> np.ndarray:
    """Where all points stand along the chords, those inside the soma before 0.

    The piece that leaves the soma keeps its proportions; before it, lengths count.
    """
    at = np.zeros(len(whole.point_um))
    at[of_whole] = stand
    edge = course.first[course.skip_um > 0]
    own = of_whole[edge]
    last = np.append(course.first[1:], stand.size)[course.skip_um > 0] - 1
    following = np.minimum(edge + 1, last)
    inside = course.along_um[edge] - whole.along_um[own]
    outside = course.along_um[following] - course.along_um[edge]
    at[own] = -inside / np.where(outside > 0, outside, 1.0) * stand[following]
    before = np.ones(at.size, bool)
    before[of_whole] = False
    rows = np.flatnonzero(before)
    to_edge = own[np.searchsorted(own, rows)] if rows.size else rows
    at[rows] = at[to_edge] - (whole.along_um[to_edge] - whole.along_um[rows])
    return at


def _geometry(course: Courses, chords: Chords, parts: Parts) -> dict[str, np.ndarray]:
    """Return the ends and radii of all segments."""
    start, end = chords.start[parts.chord], chords.end[parts.chord]
    out = {}
    for name, part in (("start", parts.begin), ("end", parts.end)):
        along = part[:, None]
        out[f"{name}_um"] = (1 - along) * course.point_um[start] + (
            along * course.point_um[end]
        )
        out[f"{name}_radius_um"] = (1 - part) * course.radius_um[start] + (
            part * course.radius_um[end]
        )
    return out


def _cable(course, chords: Chords, parts: Parts, pieces: _Pieces) -> dict:
    """Where segments lie on the cable coordinate, and beside which pieces."""
    section = course.section[chords.start][parts.chord]
    base = (chords.base_um + pieces.shift_um[course.section[chords.start]])[parts.chord]
    length = chords.length_um[parts.chord]
    begin, end = base + parts.begin * length, base + parts.end * length
    first = np.searchsorted(pieces.bounds_um, begin, side="right") - 1
    first = np.clip(first, pieces.first[section], pieces.last[section])
    last = np.searchsorted(pieces.bounds_um, end, side="left") - 1
    return {
        "cable_start_um": begin,
        "cable_end_um": end,
        "first_piece": first.astype(np.int32),
        "last_piece": np.clip(last, first, pieces.last[section]).astype(np.int32),
    }


def _parents(r, sections: Sections, course: Courses, section, path_end) -> np.ndarray:
    """Segment that each one continues; -1 in and on the soma."""
    sections_n = sections.first.size
    begin = np.searchsorted(section, np.arange(sections_n + 1)).tolist()
    section_of = sections.section[sections.place]
    is_soma = r.kind == Kind.SOMA
    heads = sections.rows[sections.first]
    gap = np.linalg.norm(r.position_um - r.begin_um, axis=1)[heads]
    joint_path = course.path_um - gap
    parent = np.arange(-1, section.size - 1, dtype=np.int32)
    end_of = np.full(sections_n, -1)
    for k, above in enumerate(sections.above.tolist()):
        before = -1
        if above >= 0 and not is_soma[above]:
            host = int(section_of[above])
            before = end_of[host]
            low, high = begin[host], begin[host + 1]
            if r.bridged[heads[k]] and low < high:
                at = np.searchsorted(path_end[low:high], joint_path[k] - _TINY_UM)
                before = min(low + int(at), high - 1)
        if begin[k] == begin[k + 1]:
            end_of[k] = before
        else:
            parent[begin[k]], end_of[k] = before, begin[k + 1] - 1
    parent[is_soma[heads][section]] = -1
    return parent
