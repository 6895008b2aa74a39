"""The course of every section: points, radii and path lengths, from the soma outward.

A neurite leaves the soma where its course last passes the soma's surface, looked for
over a path of three times the soma's reach. What lies before is no cable of the arbor.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import brentq

from circuitgen.morphology.arbor import Kind
from circuitgen.morphology.capsules import Capsules, feet
from circuitgen.morphology.reconstruction import Reconstruction
from circuitgen.morphology.sections import Sections

_TINY_UM = 1e-9
_LOOK_FOR_SURFACE = 3.0


@dataclass(frozen=True)
class Courses:
    """n points of k sections, one section after another.

    Attributes
    ----------
    point_um : float64 (n, 3)
        Points; a section begins with the point from which it leaves, unless it begins
        at the soma's root or across a gap.
    radius_um : float64 (n,)
        Radii there.
    along_um : float64 (n,)
        Length along the file's own course from the section's first point.
    row : int64 (n,)
        Row of the reconstruction, -1 where a section leaves another.
    first : int64 (k,)
        Index of the first point of every section.
    section : int64 (n,)
        Section of every point.
    skip_um : float64 (k,)
        Length inside the soma from the section's first point.
    path_um : float64 (k,)
        Path length from the soma to the section's first point, negative inside.
    """

    point_um: np.ndarray
    radius_um: np.ndarray
    along_um: np.ndarray
    row: np.ndarray
    first: np.ndarray
    section: np.ndarray
    skip_um: np.ndarray
    path_um: np.ndarray


def courses_of(r: Reconstruction, sections: Sections, soma: Capsules) -> Courses:
    """Lay out the points of every section, and measure path from the soma."""
    head = sections.rows[sections.first]
    led = (sections.above >= 0) & ~r.bridged[head]
    row = np.insert(sections.rows, sections.first[led], -1)
    # One point more for every section with a leading point.
    first = sections.first + np.cumsum(led) - led
    section = np.zeros(row.size, np.int64)
    section[first] = 1
    section = np.cumsum(section) - 1
    point, radius = r.position_um[row], r.radius_um[row]
    leading, above = first[led], sections.above[led]
    point[leading] = r.begin_um[head[led]]
    same = r.kind[above] == r.kind[head[led]]
    radius[leading] = np.where(same, r.radius_um[above], r.radius_um[head[led]])
    step = np.linalg.norm(np.diff(point, axis=0, prepend=point[:1]), axis=1)
    step[first] = 0.0
    total = np.cumsum(step)
    along = total - total[first][section]
    unmeasured = np.zeros(first.size)
    laid = Courses(
        point, radius, along, row, first, section, unmeasured, unmeasured.copy()
    )
    skip, path = _measured(r, sections, laid, soma)
    return replace(laid, skip_um=skip, path_um=path)


def _measured(r: Reconstruction, sections: Sections, c: Courses, soma: Capsules):
    """Return how far sections run inside the soma, and the paths to their begins."""
    skip, path = c.skip_um.copy(), c.path_um.copy()
    bounds = [*c.first.tolist(), len(c.point_um)]
    along_of = np.zeros(r.kind.size)
    along_of[c.row[c.row >= 0]] = c.along_um[c.row >= 0]
    section_of = sections.section[sections.place]
    is_soma = r.kind == Kind.SOMA
    inside = np.zeros(skip.size, bool)
    heads = sections.rows[sections.first].tolist()
    for k, (head, above) in enumerate(zip(heads, sections.above.tolist(), strict=True)):
        if is_soma[head]:
            continue
        host = -1 if is_soma[above] else int(section_of[above])
        if host >= 0:
            at = along_of[above] - (_back_um(r, head) if r.bridged[head] else 0.0)
            path[k] = max(path[host] + at, 0.0)
        gap = np.linalg.norm(r.position_um[head] - r.begin_um[head])
        if r.bridged[head]:
            path[k] += gap
        # A piece may have been joined to the soma by a sample inside it.
        near = not r.bridged[head] or gap == 0
        if near and (host < 0 or inside[host]):
            part = slice(bounds[k], bounds[k + 1])
            skip[k] = _inside_um(c.point_um[part], c.along_um[part], soma)
            path[k] -= skip[k]
            inside[k] = skip[k] > 0 and skip[k] >= c.along_um[part][-1] - _TINY_UM
    return skip, path


def _back_um(r: Reconstruction, head: int) -> float:
    """Length from the point of a piece where a gap begins to the piece's end."""
    return float(np.linalg.norm(r.position_um[r.parent[head]] - r.begin_um[head]))


def _inside_um(points: np.ndarray, along: np.ndarray, soma: Capsules) -> float:
    """Length of a course up to where it last leaves the soma, looked for up to a limit.

    Along a straight line the distance from a sphere is least at the foot of the centre
    (the origin): feet and samples together miss no passage through a sphere.
    """
    limit = _LOOK_FOR_SURFACE * soma.reach_um
    part = feet(np.zeros(3), points[:-1], points[1:])
    marks = np.concatenate([along, along[:-1] + part * np.diff(along), [limit]])
    marks = np.unique(marks[marks <= along[-1]])

    def outside_um(at) -> np.ndarray:
        axes = [np.interp(at, along, axis) for axis in points.T]
        return soma.outside_um(np.column_stack(axes))

    outside = outside_um(marks)
    # A course that merely touches the surface does not pass it.
    inside = outside < -_TINY_UM
    within = np.flatnonzero(inside & (marks <= limit + _TINY_UM))
    if not within.size:
        return 0.0
    beyond = np.flatnonzero(~inside[within[-1] :])
    if not beyond.size:
        return float(marks[-1])
    high = int(within[-1] + beyond[0])
    if outside[high] <= 0:
        return float(marks[high])
    ends = marks[high - 1], marks[high]
    return float(brentq(lambda at: outside_um([at])[0], *ends, xtol=1e-12))


def outside_soma(c: Courses) -> tuple[Courses, np.ndarray]:
    """Cut off what lies inside the soma.

    Returns
    -------
    Courses
        Every section begins on the soma's surface, if it began inside; one that ends
        inside keeps a single point. `row` and `along_um` are as before.
    ndarray of int
        Which point of `c` every point is; the point at the surface is the last one
        inside, moved.
    """
    skip = c.skip_um[c.section]
    last = np.append(c.first[1:], len(c.point_um)) - 1
    # The last point that is not outside moves to the surface.
    inside = np.flatnonzero((skip > 0) & (c.along_um <= skip + _TINY_UM))
    ends = np.append(c.section[inside[1:]] != c.section[inside[:-1]], True)
    edge = inside[ends[: inside.size]]
    following = np.minimum(edge + 1, last[c.section[edge]])
    length = c.along_um[following] - c.along_um[edge]
    beyond = skip[edge] - c.along_um[edge]
    share = np.clip(beyond / np.where(length > 0, length, 1.0), 0.0, 1.0)
    point, radius, along = c.point_um.copy(), c.radius_um.copy(), c.along_um.copy()
    point[edge] += share[:, None] * (point[following] - point[edge])
    radius[edge] += share * (radius[following] - radius[edge])
    along[edge] = skip[edge]
    keep = np.ones(along.size, bool)
    keep[np.setdiff1d(inside, edge)] = False
    section = c.section[keep]
    cut = replace(
        c,
        point_um=point[keep],
        radius_um=radius[keep],
        along_um=along[keep],
        row=c.row[keep],
        first=np.flatnonzero(np.diff(section, prepend=-1)),
        section=section,
    )
    return cut, np.flatnonzero(keep)
