"""Compiled loops of the column: windings of a closed mesh, and taking places."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from circuitgen.core.compilation import kernel


class Grid(NamedTuple):
    """Voxels that list the places taken; `size` is at least the widest spacing.

    `head` holds the last place of each voxel and -1 for none. A wrap of 0 is an open
    edge; otherwise the voxels divide the period.
    """

    origin: np.ndarray
    size: np.ndarray
    shape: np.ndarray
    head: np.ndarray
    wrap_x: float
    wrap_y: float


class Places(NamedTuple):
    """Places taken: centre (k, 3), radius (k,), and the next place of the voxel (k,)."""

    center: np.ndarray
    radius: np.ndarray
    following: np.ndarray


@kernel
def _voxel_along(value, grid, axis):
    index = int(np.floor((value - grid.origin[axis]) / grid.size[axis]))
    return min(max(index, 0), grid.shape[axis] - 1)


@kernel
def _neighbour(index, step, count, wrapped):
    """Index of a neighbouring voxel along one axis; -1 beyond an open edge."""
    moved = index + step
    if wrapped:
        return moved % count
    return moved if 0 <= moved < count else -1


@kernel
def _nearest_image(difference, period):
    if period > 0:
        return difference - period * np.round(difference / period)
    return difference


@kernel
def _overlaps_in_voxel(x, y, z, radius, place, grid, places):
    while place >= 0:
        dx = _nearest_image(x - places.center[place, 0], grid.wrap_x)
        dy = _nearest_image(y - places.center[place, 1], grid.wrap_y)
        dz = z - places.center[place, 2]
        apart = radius + places.radius[place]
        if dx * dx + dy * dy + dz * dz < apart * apart:
            return True
        place = places.following[place]
    return False


@kernel
def _is_free(x, y, z, radius, grid, places):
    nx, ny, nz = grid.shape
    ix, iy = _voxel_along(x, grid, 0), _voxel_along(y, grid, 1)
    iz = _voxel_along(z, grid, 2)
    for step_x in range(-1, 2):
        jx = _neighbour(ix, step_x, nx, grid.wrap_x > 0)
        for step_y in range(-1, 2):
            jy = _neighbour(iy, step_y, ny, grid.wrap_y > 0)
            for step_z in range(-1, 2):
                jz = _neighbour(iz, step_z, nz, False)
                if jx < 0 or jy < 0 or jz < 0:
                    continue
                place = grid.head[(jx * ny + jy) * nz + jz]
                if _overlaps_in_voxel(x, y, z, radius, place, grid, places):
                    return False
    return True


@kernel
def _link(place, grid, places):
    center = places.center[place]
    ix, iy = _voxel_along(center[0], grid, 0), _voxel_along(center[1], grid, 1)
    iz = _voxel_along(center[2], grid, 2)
    voxel = (ix * grid.shape[1] + iy) * grid.shape[2] + iz
    places.following[place] = grid.head[voxel]
    grid.head[voxel] = place


@kernel
def take_places(candidates, is_cell, radius, wanted, places_n, grid, places, chosen):
    """Take free candidates in their order until `wanted` of them are cells.

    `places` has room for all candidates beyond `places_n`. `chosen` receives the
    candidate of each new place. Returns the number of candidates looked at and of new
    places.
    """
    cells_n = 0
    taken_n = 0
    seen = 0
    while seen < candidates.shape[0] and cells_n < wanted:
        x, y, z = candidates[seen]
        if _is_free(x, y, z, radius, grid, places):
            place = places_n + taken_n
            places.center[place] = candidates[seen]
            places.radius[place] = radius
            _link(place, grid, places)
            chosen[taken_n] = seen
            taken_n += 1
            cells_n += is_cell[seen]
        seen += 1
    return seen, taken_n


class Tiles(NamedTuple):
    """Triangles by square tile of the x-y plane: tile t has first[t]:first[t + 1]."""

    origin: np.ndarray
    size: float
    shape: np.ndarray
    first: np.ndarray
    triangles: np.ndarray


@kernel
def _tile_along(value, origin, size, count):
    return min(max(int(np.floor((value - origin) / size)), 0), count - 1)


@kernel
def list_triangles(corners, origin, size, shape, first, triangles, is_counting):
    """Count the triangles whose box meets each tile, or list them.

    Counting fills ``first[1:]``; listing expects `first` summed up, and moves
    ``first[t]`` to the end of tile t.
    """
    for triangle in range(corners.shape[0]):
        x, y = corners[triangle, :, 0], corners[triangle, :, 1]
        low_x = _tile_along(x.min(), origin[0], size, shape[0])
        high_x = _tile_along(x.max(), origin[0], size, shape[0])
        low_y = _tile_along(y.min(), origin[1], size, shape[1])
        high_y = _tile_along(y.max(), origin[1], size, shape[1])
        for ix in range(low_x, high_x + 1):
            for iy in range(low_y, high_y + 1):
                tile = ix * shape[1] + iy
                if is_counting:
                    first[tile + 1] += 1
                else:
                    triangles[first[tile]] = triangle
                    first[tile] += 1


@kernel
def _crossing(ax, ay, bx, by, px, py):
    """Turn of edge a-b about p as a ray from p toward +x counts it: -1, 0 or 1.

    The lower end is always taken first, so that two triangles agree about the edge
    that they share to the last bit, and no point falls between them.
    """
    if (ay > py) == (by > py):
        return 0
    if ay < by:
        side = (bx - ax) * (py - ay) - (by - ay) * (px - ax)
        return 1 if side > 0 else 0
    side = (ax - bx) * (py - by) - (ay - by) * (px - bx)
    return -1 if side > 0 else 0


@kernel
def _turns_above(corner, x, y, z):
    """Turn of a triangle, seen from above, about a point below it; 0 if not below."""
    turn = 0
    for end in range(3):
        a, b = corner[end], corner[(end + 1) % 3]
        turn += _crossing(a[0], a[1], b[0], b[1], x, y)
    if turn == 0:
        return 0
    ux, uy = corner[1, 0] - corner[0, 0], corner[1, 1] - corner[0, 1]
    vx, vy = corner[2, 0] - corner[0, 0], corner[2, 1] - corner[0, 1]
    wx, wy = x - corner[0, 0], y - corner[0, 1]
    area = ux * vy - uy * vx
    low, high = corner[:, 2].min(), corner[:, 2].max()
    height = low
    if area != 0:
        height = corner[0, 2]
        height += (wx * vy - wy * vx) / area * (corner[1, 2] - corner[0, 2])
        height += (ux * wy - uy * wx) / area * (corner[2, 2] - corner[0, 2])
    return turn if min(max(height, low), high) > z else 0


@kernel
def winding_numbers(points, corners, tiles, out):
    """Count how often a closed surface winds around each point: 1 inside, 0 outside."""
    extent_x = tiles.size * tiles.shape[0]
    extent_y = tiles.size * tiles.shape[1]
    for row in range(points.shape[0]):
        x, y, z = points[row]
        out[row] = 0
        if not (0 <= x - tiles.origin[0] <= extent_x):
            continue
        if not (0 <= y - tiles.origin[1] <= extent_y):
            continue
        ix = _tile_along(x, tiles.origin[0], tiles.size, tiles.shape[0])
        iy = _tile_along(y, tiles.origin[1], tiles.size, tiles.shape[1])
        tile = ix * tiles.shape[1] + iy
        for entry in range(tiles.first[tile], tiles.first[tile + 1]):
            out[row] += _turns_above(corners[tiles.triangles[entry]], x, y, z)
