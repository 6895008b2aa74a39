"""Slow, readable twins of the whole-array steps of the morphology room."""

import numpy as np

COURSE_UM, RADIUS_UM = 0.1, 0.05  # what simplify.py promises


def depth(parent, row):
    """Count a sample's ancestors one by one; -1 when one of them comes again."""
    seen = {row}
    while (row := int(parent[row])) >= 0:
        if row in seen:
            return -1
        seen.add(row)
    return len(seen) - 1


def nearest_stop(parent, stop, row):
    """Climb from a sample to the first stop or root."""
    while parent[row] >= 0 and not stop[row]:
        row = int(parent[row])
    return row


def corners(points, radii):
    """Return indices of the corners of one section, by recursion."""
    if len(points) < 3:
        return list(range(len(points)))
    chord = points[-1] - points[0]
    square = chord @ chord
    furthest, stray = 0.0, []
    for point, radius in zip(points[1:-1], radii[1:-1], strict=True):
        along = (point - points[0]) @ chord / square if square else 0.0
        furthest = max(furthest, min(along, 1.0))
        course = np.linalg.norm(point - points[0] - furthest * chord)
        off = abs(radius - radii[0] - along * (radii[-1] - radii[0]))
        stray.append(max(course / COURSE_UM, off / RADIUS_UM))
    if max(stray) <= 1:
        return [0, len(points) - 1]
    middle = 1 + int(np.argmax(stray))
    left = corners(points[: middle + 1], radii[: middle + 1])
    right = corners(points[middle:], radii[middle:])
    return left + [middle + i for i in right[1:]]


def nearest_on_pieces(point, start, end):
    """Distance from a point to the nearest of straight pieces, one by one."""
    best = np.inf
    for a, b in zip(start, end, strict=True):
        square = (b - a) @ (b - a)
        part = min(max((point - a) @ (b - a) / square, 0.0), 1.0) if square else 0.0
        best = min(best, float(np.linalg.norm(a + part * (b - a) - point)))
    return best
