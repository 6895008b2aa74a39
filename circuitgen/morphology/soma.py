"""Finding the soma of a reconstruction, and its form; `reconstruction` has the rules."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy.spatial import cKDTree

from circuitgen.morphology.arbor import Kind
from circuitgen.morphology.capsules import Capsules, feet
from circuitgen.morphology.findings import Findings, count_of
from circuitgen.morphology.samples import Samples
from circuitgen.morphology.trees import depth_of, nearest_stop, root_of

JOIN_TO_SOMA_UM = 10.0
MADE_SOMA_RADIUS_UM = 3.0
UNKNOWN = 0
_THREE_POINT_MISS = 0.1
_OPEN_SHARE = 0.4


def settle_soma(samples: Samples, findings: Findings) -> Samples:
    """Decide which samples are the soma, make one if there is none, and root at it."""
    if not (samples.kind == Kind.SOMA).any():
        return _make_soma(samples, findings)
    samples = _drop_strays(samples, findings)
    return _root_at_soma(samples, findings)


def _make_soma(samples: Samples, findings: Findings) -> Samples:
    """Turn the root of the tree with the most cable into a soma."""
    cable = np.bincount(root_of(samples.parent), weights=samples.length_um)
    row = int(cable.argmax())
    radius_um = max(float(samples.radius_um[row]), MADE_SOMA_RADIUS_UM)
    kind, radius = samples.kind.copy(), samples.radius_um.copy()
    kind[row], radius[row] = Kind.SOMA, radius_um
    text = f"no soma: a sphere of {radius_um:.1f} um radius made at the root of the "
    text += "longest tree; contacts on the soma and all path lengths are nominal"
    findings.warn("soma_made", text)
    return replace(samples, kind=kind, radius_um=radius)


def _drop_strays(samples: Samples, findings: Findings) -> Samples:
    """Keep the largest group of connected soma samples, and those beside it."""
    rows = np.flatnonzero(samples.kind == Kind.SOMA)
    above = samples.parent[rows]
    joined = np.zeros(samples.kind.size, bool)
    joined[rows] = (above >= 0) & (samples.kind[above] == Kind.SOMA)
    group = nearest_stop(samples.parent, ~joined)[rows]
    names, group = np.unique(group, return_inverse=True)
    if names.size == 1:
        return samples
    points, radii = samples.position_um[rows], np.maximum(samples.radius_um[rows], 0)
    size = np.bincount(group)
    middle = np.column_stack(
        [np.bincount(group, weights=axis) / size for axis in points.T]
    )
    extent = np.zeros(names.size)
    np.maximum.at(extent, group, np.linalg.norm(points - middle[group], axis=1) + radii)
    main = group == extent.argmax()
    away, nearest = cKDTree(points[main]).query(points)
    stray = rows[away - radii - radii[main][nearest] > JOIN_TO_SOMA_UM]
    text = f"{{n}} of type soma more than {JOIN_TO_SOMA_UM:g} um from the soma take "
    text += "their ancestor's type: if the file holds two cells, contacts are wrong"
    findings.warn("soma_apart", text, samples.line[stray])
    kind = samples.kind.copy()
    kind[stray] = UNKNOWN
    return replace(samples, kind=kind)


def _root_at_soma(samples: Samples, findings: Findings) -> Samples:
    """Root every tree that has soma samples, but no soma at its root, at the soma."""
    root, depth = root_of(samples.parent), depth_of(samples.parent)
    is_soma = samples.kind == Kind.SOMA
    rows = np.flatnonzero(is_soma & ~is_soma[root])
    # The first soma sample from each of those roots outward.
    rows = rows[np.lexsort((samples.number[rows], depth[rows]))]
    _, first = np.unique(root[rows], return_index=True)
    trees_n = count_of(first.size, "tree")
    text = f"{trees_n} rooted at the soma, not where the file has the root; "
    text += "path lengths count from the soma"
    findings.repair("rerooted", text, samples.line[rows[first]])
    for row in rows[first].tolist():
        samples = samples.rooted_at(row)
    return samples.ordered() if first.size else samples


def shape_soma(samples: Samples, findings: Findings) -> tuple[Samples, np.ndarray]:
    """Bring the soma into its form; return the samples and the soma's centre.

    A sphere becomes one sample, to which all neurites are joined; their pieces begin
    where they began in the file.
    """
    rows = np.flatnonzero(samples.kind == Kind.SOMA)
    if rows.size > 1:
        sphere = _three_point(samples, rows) or _contour(samples, rows, findings)
        if sphere:
            return _merged(samples, rows, *sphere), sphere[1]
    samples = _mend_soma_radii(samples, rows, findings)
    parent, begin = samples.parent.copy(), samples.begin_um.copy()
    cut = rows[~np.isin(parent[rows], rows)]
    parent[cut], begin[cut] = -1, samples.position_um[cut]
    samples = replace(samples, parent=parent, begin_um=begin)
    return samples, _center(samples.begin_um[rows], samples.position_um[rows])


def soma_capsules(samples: Samples) -> tuple[Capsules, np.ndarray]:
    """Return the soma as capsules, and the rows of the samples that end them."""
    rows = np.flatnonzero(samples.kind == Kind.SOMA)
    above = np.where(samples.parent[rows] >= 0, samples.parent[rows], rows)
    capsules = Capsules(
        samples.begin_um[rows],
        samples.position_um[rows],
        samples.radius_um[above],
        samples.radius_um[rows],
    )
    return capsules, rows


def _three_point(samples: Samples, rows: np.ndarray):
    """Return (row, centre, radius) by the three-point convention, or None.

    Two samples at one radius on opposite sides of the first, all of that radius.
    """
    roots = rows[~np.isin(samples.parent[rows], rows)]
    if rows.size != 3 or roots.size != 1:
        return None
    row = int(roots[0])
    sides = rows[rows != row]
    radius = float(samples.radius_um[row])
    arms = samples.position_um[sides] - samples.position_um[row]
    opposite = np.linalg.norm(arms[0] + arms[1]) <= _THREE_POINT_MISS * radius
    away = np.linalg.norm(arms, axis=1)
    is_convention = (
        (samples.parent[sides] == row).all()
        and np.ptp(samples.radius_um[rows]) <= 0.01 * radius
        and np.abs(away - radius).max() <= _THREE_POINT_MISS * radius
        and opposite
    )
    return (row, samples.position_um[row], radius) if is_convention else None


def _contour(samples: Samples, rows: np.ndarray, findings: Findings):
    """Return (row, centre, radius) when the samples are an outline, or None.

    An outline runs round its own middle, which lies outside of every capsule of it,
    and comes back to where it began.
    """
    joined = rows[np.isin(samples.parent[rows], rows)]
    roots = rows[~np.isin(samples.parent[rows], rows)]
    start, end = samples.position_um[samples.parent[joined]], samples.position_um[joined]
    radius = np.maximum(samples.radius_um[samples.parent[joined]], 0)
    radius = np.maximum(radius, samples.radius_um[joined])
    if joined.size < 3:
        return None
    tips = rows[~np.isin(rows, samples.parent[joined])]
    if roots.size == 1 and tips.size == 1:
        # Close the outline.
        start = np.vstack([start, samples.position_um[tips]])
        end = np.vstack([end, samples.position_um[roots]])
        radius = np.append(radius, 0.0)
        length = np.linalg.norm(end - start, axis=1)
        if length[-1] > _OPEN_SHARE * length[:-1].sum():
            return None
    center = _center(start, end)
    foot = start + feet(center, start, end)[:, None] * (end - start)
    if (np.linalg.norm(center - foot, axis=1) <= radius).any():
        return None
    mean_um = _mean_distance(center, start, end)
    text = f"outline of {{n}} taken as a sphere of {mean_um:.1f} um radius, its mean "
    text += "distance from the middle; contacts on the soma lie on that sphere"
    findings.repair("soma_outline", text, samples.line[rows])
    row = roots[np.argmin(samples.number[roots])]
    return int(row), center, mean_um


def _center(start: np.ndarray, end: np.ndarray) -> np.ndarray:
    """Centre of straight pieces (k, 3) by length; of points when there is no length."""
    length = np.linalg.norm(end - start, axis=1)
    if length.sum() > 0:
        return np.average((start + end) / 2, axis=0, weights=length)
    return end.mean(axis=0)


def _mean_distance(center: np.ndarray, start: np.ndarray, end: np.ndarray) -> float:
    """Mean distance of straight pieces from a point, over their length.

    The integral of sqrt(h^2 + t^2) along a line that passes the point at distance h.
    """
    step = end - start
    length = np.linalg.norm(step, axis=1)
    real = length > 0
    start, step, length = start[real], step[real], length[real]
    low = ((start - center) * step).sum(axis=1) / length
    away = np.linalg.norm(start - center, axis=1)
    height = np.sqrt(np.maximum(away**2 - low**2, 0.0))
    safe = np.where(height > 0, height, 1.0)

    def integral(t: np.ndarray) -> np.ndarray:
        bow = np.where(height > 0, height**2 * np.arcsinh(t / safe), 0.0)
        return (t * np.hypot(t, height) + bow) / 2

    return float((integral(low + length) - integral(low)).sum() / length.sum())


def _merged(samples: Samples, rows, row: int, center, radius: float) -> Samples:
    """Put one sphere in the place of the soma samples in `rows`."""
    parent, position = samples.parent.copy(), samples.position_um.copy()
    begin, radii = samples.begin_um.copy(), samples.radius_um.copy()
    parent[np.isin(parent, rows)] = row
    parent[row], position[row], begin[row], radii[row] = -1, center, center, radius
    samples = replace(
        samples, parent=parent, position_um=position, begin_um=begin, radius_um=radii
    )
    others = rows[rows != row]
    return samples.taken(np.setdiff1d(np.arange(samples.kind.size), others)).ordered()


def _mend_soma_radii(samples: Samples, rows, findings: Findings) -> Samples:
    """Give soma samples without radius the largest radius of the soma."""
    bad = rows[samples.radius_um[rows] <= 0]
    radius = samples.radius_um.copy()
    largest = float(radius[rows].max())
    radius[bad] = largest if largest > 0 else MADE_SOMA_RADIUS_UM
    if bad.size:
        text = (
            f"{{n}} of the soma with a radius of zero or less given {radius[bad[0]]:g}"
        )
        text += " um; contacts on the soma are nominal"
        findings.warn("soma_radius", text, samples.line[bad])
    return replace(samples, radius_um=radius)
