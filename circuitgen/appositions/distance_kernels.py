"""Compiled distances between straight segments."""

from __future__ import annotations

import numpy as np

from circuitgen.core.compilation import kernel

# Lines whose sine squared is below this are nearly parallel.
_PARALLEL = 1e-9


@kernel
def _point_to_segment(px, py, pz, ax, ay, az, ux, uy, uz):
    """Squared distance from p to the segment from a along u, and the fraction there."""
    wx, wy, wz = px - ax, py - ay, pz - az
    square = ux * ux + uy * uy + uz * uz
    along = wx * ux + wy * uy + wz * uz
    fraction = min(max(along / square, 0.0), 1.0) if square > 0.0 else 0.0
    wx, wy, wz = wx - fraction * ux, wy - fraction * uy, wz - fraction * uz
    return wx * wx + wy * wy + wz * wz, fraction


@kernel
def closest(ax, ay, az, ux, uy, uz, cx, cy, cz, vx, vy, vz):
    """Closest approach of the segments from a along u and from c along v.

    Returns the squared distance and the fractions along both. The interior
    solution of the two lines stands alone when it lies inside both segments and the
    lines are not nearly parallel; otherwise the four end points compete with it.
    """
    wx, wy, wz = cx - ax, cy - ay, cz - az
    uu, vv = ux * ux + uy * uy + uz * uz, vx * vx + vy * vy + vz * vz
    uv, uw = ux * vx + uy * vy + uz * vz, ux * wx + uy * wy + uz * wz
    vw = vx * wx + vy * wy + vz * wz
    best, s_best, t_best = np.inf, 0.0, 0.0
    determinant = uu * vv - uv * uv
    if determinant > 0.0:
        s = (uw * vv - uv * vw) / determinant
        t = (uv * s - vw) / vv
        if 0.0 <= s <= 1.0 and 0.0 <= t <= 1.0:
            x, y, z = wx + t * vx - s * ux, wy + t * vy - s * uy, wz + t * vz - s * uz
            best, s_best, t_best = x * x + y * y + z * z, s, t
            if determinant > _PARALLEL * uu * vv:
                return best, s_best, t_best
    for end in range(2):
        distance, t = _point_to_segment(
            ax + end * ux, ay + end * uy, az + end * uz, cx, cy, cz, vx, vy, vz
        )
        if distance < best:
            best, s_best, t_best = distance, float(end), t
        distance, s = _point_to_segment(
            cx + end * vx, cy + end * vy, cz + end * vz, ax, ay, az, ux, uy, uz
        )
        if distance < best:
            best, s_best, t_best = distance, s, float(end)
    return best, s_best, t_best


@kernel
def segment_distances(a, b, c, d):
    """Distances and fractions of closest approach of segments ab and cd, rows (n, 3)."""
    out = np.zeros((a.shape[0], 3))
    for row in range(a.shape[0]):
        u, v = b[row] - a[row], d[row] - c[row]
        square, s, t = closest(
            a[row, 0],
            a[row, 1],
            a[row, 2],
            u[0],
            u[1],
            u[2],
            c[row, 0],
            c[row, 1],
            c[row, 2],
            v[0],
            v[1],
            v[2],
        )
        out[row, 0], out[row, 1], out[row, 2] = np.sqrt(square), s, t
    return out
