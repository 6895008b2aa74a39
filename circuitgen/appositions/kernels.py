"""Compiled loops of the apposition search: arrays in, arrays out.

Targets are sorted by voxel, the z axis fastest, so that all that lie near
an axon segment are a few contiguous runs of rows. A whole run is tested at once in
single precision by bounds that can only err on the side of keeping a row; what is left
is decided in double precision from the cells' own frames, so that an answer never
depends on how the work was cut into blocks.
"""

from __future__ import annotations

import numpy as np

from circuitgen.appositions.distance_kernels import closest
from circuitgen.appositions.index_kernels import middle_of, place, wrapped
from circuitgen.appositions.records import Hits, Pairs, Sites, Work
from circuitgen.appositions.thinning_kernels import sort_hits, sorted_by, thin
from circuitgen.core.compilation import kernel

_OWN_KINDS = np.uint8(12)  # an autapse may sit on basal and apical dendrite only
_TILE_UM = 16.0


@kernel
def _mark_near(middle, half, half_length, reach, shapes, low, high, near):
    """Mark the rows low to high that may lie within reach of an axon segment.

    Along any unit direction w, |m.w| - |u.w| - |v.w| bounds the distance of two
    segments from below (m between the middles, u and v the halves). Two directions
    are tried, between the middles and perpendicular to both segments, after the
    test of the bounding spheres. No branch, so that the compiler can test many rows
    at once.
    """
    ax, ay, az = middle[0], middle[1], middle[2]
    ux, uy, uz = half[0], half[1], half[2]
    # Unsigned indices, for a sign to check at every step would stop vectorisation.
    first = np.uint64(low)
    for i in range(np.uint64(high - low)):
        row = first + i
        mx, my, mz = shapes[0, row] - ax, shapes[1, row] - ay, shapes[2, row] - az
        vx, vy, vz = shapes[3, row], shapes[4, row], shapes[5, row]
        far = reach + shapes[7, row]
        square = mx * mx + my * my + mz * mz
        sphere = half_length + shapes[6, row] + far
        along = abs(ux * mx + uy * my + uz * mz) + abs(vx * mx + vy * my + vz * mz)
        nx, ny, nz = uy * vz - uz * vy, uz * vx - ux * vz, ux * vy - uy * vx
        # u and v are perpendicular to n but for rounding, which counts when n is short.
        rounding = abs(ux * nx + uy * ny + uz * nz) + abs(vx * nx + vy * ny + vz * nz)
        across = abs(mx * nx + my * ny + mz * nz) - rounding
        near[i] = (
            (square <= sphere * sphere)
            & (square - along <= far * np.sqrt(square))
            & (across <= far * np.sqrt(nx * nx + ny * ny + nz * nz))
        )


@kernel
def _longer(array):
    """Copy a one-dimensional array into one of twice the size."""
    out = np.zeros(2 * array.size, array.dtype)
    out[: array.size] = array
    return out


@kernel
def _new_hits(size):
    return Hits(
        np.zeros(size, np.int32),
        np.zeros(size, np.int32),
        np.zeros(size, np.int32),
        np.zeros(size, np.int32),
        np.zeros(size, np.float64),
        np.zeros(size, np.float64),
        np.zeros(size, np.float64),
    )


@kernel
def _grow_hits(hits):
    return Hits(
        _longer(hits.pre),
        _longer(hits.owner),
        _longer(hits.axon),
        _longer(hits.target),
        _longer(hits.gap),
        _longer(hits.axon_fraction),
        _longer(hits.target_fraction),
    )


@kernel
def _list_marked(near, count, low, found, n):
    """Append low + i to `found` for each marked i < count; returns the new length.

    Marks are read eight at a time, for few are set.
    """
    near[count : count + 8] = 0
    words = near.view(np.uint64)
    for word in range((count + 7) // 8):
        if words[word]:
            for i in range(8 * word, 8 * word + 8):
                if near[i]:
                    found[n] = low + i
                    n += 1
    return n


@kernel
def _shift(period, apart):
    """Whole periods that bring a copy nearest to what lies `apart` from it."""
    return period * np.round(apart / period) if period > 0.0 else 0.0


@kernel
def _test(axons, layer, rules, own, mask, pre, axon, work, m, hits, n):
    """Decide the m listed rows in double precision; append those close enough.

    `own` is the presynaptic cell's place in the layer's list of cells, -1 if absent.
    """
    while hits.owner.size < n + m:
        hits = _grow_hits(hits)
    segment, exact, period = work.segment, layer.exact, layer.grid.period
    ax, ay, az = segment[0, 0], segment[0, 1], segment[0, 2]
    ux, uy, uz = segment[1, 0] - ax, segment[1, 1] - ay, segment[1, 2] - az
    a_radius = axons.start_radius[axon]
    a_taper = axons.end_radius[axon] - a_radius
    for k in range(m):
        row = work.found[work.few[k]]
        owner, kind = layer.owner[row], layer.kind[row]
        if owner == own and not (rules.autapses and kind & _OWN_KINDS):
            continue
        if not kind & mask:
            continue
        cx, cy, cz = exact[row, 0], exact[row, 1], exact[row, 2]
        vx, vy, vz = exact[row, 3], exact[row, 4], exact[row, 5]
        cx += _shift(period[0], ax + 0.5 * ux - cx - 0.5 * vx)
        cy += _shift(period[1], ay + 0.5 * uy - cy - 0.5 * vy)
        square, s, t = closest(ax, ay, az, ux, uy, uz, cx, cy, cz, vx, vy, vz)
        b_radius = exact[row, 6] + t * exact[row, 7]
        gap = max(np.sqrt(square) - a_radius - s * a_taper - b_radius, 0.0)
        if gap <= rules.max_gap:
            hits.pre[n], hits.owner[n], hits.axon[n] = pre, owner, axon
            hits.target[n], hits.gap[n] = layer.segment[row], gap
            hits.axon_fraction[n], hits.target_fraction[n] = s, t
            n += 1
    return hits, n


@kernel
def _voxel_range(middle, extent, grid, axis):
    """First and last voxel along an axis, open ends cut off, periodic ones not."""
    low = int(np.floor((middle[axis] - extent) / grid.size[axis]))
    high = int(np.floor((middle[axis] + extent) / grid.size[axis]))
    if grid.period[axis] > 0.0:
        return low, high
    return max(low, 0), min(high, grid.shape[axis] - 1)


@kernel
def _into_box(step, voxels, period):
    """Bring a voxel's index back into a periodic box; also return the shift of that."""
    if step < 0:
        return step + voxels, -period
    if step >= voxels:
        return step - voxels, period
    return step, 0.0


@kernel
def _look(layer, reach, work):
    """List the rows of a layer that may be close to the capsule in `work.segment`.

    `reach` is the capsule's radius plus the largest gap and the slack. Returns how many
    rows of the layer stand in `work.found`; `work.middle` is left at the capsule's.
    """
    segment, middle, half, grid = work.segment, work.middle, work.half, layer.grid
    middle_of(segment[0], segment[1], grid, middle)
    square, m = 0.0, 0
    for axis in range(3):
        half[axis] = 0.5 * (segment[1, axis] - segment[0, axis])
        square += float(half[axis]) ** 2
    half_length, reach = np.float32(np.sqrt(square)), np.float32(reach)
    extent = layer.reach + reach
    z_low, z_high = _voxel_range(middle, abs(half[2]) + extent, grid, 2)
    if z_low > z_high:
        return m
    x_low, x_high = _voxel_range(middle, abs(half[0]) + extent, grid, 0)
    y_low, y_high = _voxel_range(middle, abs(half[1]) + extent, grid, 1)
    x_middle, y_middle = middle[0], middle[1]
    for step_x in range(x_low, x_high + 1):
        x, shift = _into_box(step_x, grid.shape[0], grid.period[0])
        middle[0] = x_middle - shift
        for step_y in range(y_low, y_high + 1):
            y, shift = _into_box(step_y, grid.shape[1], grid.period[1])
            middle[1] = y_middle - shift
            column = (x * grid.shape[1] + y) * grid.shape[2]
            low, high = layer.first[column + z_low], layer.first[column + z_high + 1]
            if low < high:
                _mark_near(
                    middle, half, half_length, reach, layer.shapes, low, high, work.near
                )
                m = _list_marked(work.near, high - low, low, work.found, m)
    middle[0], middle[1] = x_middle, y_middle
    return m


@kernel
def _copy_shapes(layer, m, work):
    """Copy the shapes of the m rows found, each from its copy nearest to the group."""
    shapes, middle, period = work.shapes, work.middle, layer.grid.period
    for k in range(m):
        row = work.found[k]
        for axis in range(8):
            shapes[axis, k] = layer.shapes[axis, row]
        shapes[0, k] += _shift(period[0], middle[0] - shapes[0, k])
        shapes[1, k] += _shift(period[1], middle[1] - shapes[1, k])


@kernel
def _narrow(axons, turn, position, rules, axon, origin, m, work):
    """List in `work.few` which of the m rows copied may be close to one segment.

    `origin` leads from the circuit frame to that of the copied shapes.
    """
    segment, middle, half = work.segment, work.middle, work.half
    place(axons.start[axon], turn, position, segment[0])
    place(axons.end[axon], turn, position, segment[1])
    square = 0.0
    for axis in range(3):
        middle[axis] = 0.5 * (segment[0, axis] + segment[1, axis]) - origin[axis]
        half[axis] = 0.5 * (segment[1, axis] - segment[0, axis])
        square += float(half[axis]) ** 2
    reach = max(axons.start_radius[axon], axons.end_radius[axon])
    reach = np.float32(reach + rules.max_gap + rules.slack)
    half_length = np.float32(np.sqrt(square))
    _mark_near(middle, half, half_length, reach, work.shapes, 0, m, work.near)
    return _list_marked(work.near, m, 0, work.few, 0)


@kernel
def _collect(axons, layer, placed, rules, own, cell, pre, group, work, hits, n):
    """Collect the hits of one group of segments of a cell's axon in one layer."""
    segment, origin = work.segment, work.origin
    turn, position, mask = placed.turn[cell], placed.position[cell], placed.mask[cell]
    reach = axons.group_radius[group] + rules.max_gap + rules.slack
    place(axons.group_start[group], turn, position, segment[0])
    place(axons.group_end[group], turn, position, segment[1])
    m = _look(layer, reach, work)
    if m == 0:
        return hits, n
    _copy_shapes(layer, m, work)
    for axis in range(3):
        middle = 0.5 * (segment[0, axis] + segment[1, axis])
        origin[axis] = middle - work.middle[axis]
    for axon in range(axons.group_bounds[group], axons.group_bounds[group + 1]):
        few = _narrow(axons, turn, position, rules, axon, origin, m, work)
        if few:
            hits, n = _test(
                axons, layer, rules, own, mask, pre, axon, work, few, hits, n
            )
    return hits, n


@kernel
def list_groups(axons, placed, pre_cells, grid):
    """List the axon groups of some cells: tile of its place, cell, and group of each.

    Tiles are single numbers; cells count within `pre_cells`.
    """
    total = 0
    for cell in pre_cells:
        arbor = placed.arbor[cell]
        total += axons.group_first[arbor + 1] - axons.group_first[arbor]
    pre, group = np.zeros(total, np.int32), np.zeros(total, np.int32)
    key, start = np.zeros(total, np.int64), np.zeros(3)
    n = 0
    for index in range(pre_cells.size):
        cell = pre_cells[index]
        arbor, turn, position = (
            placed.arbor[cell],
            placed.turn[cell],
            placed.position[cell],
        )
        for item in range(axons.group_first[arbor], axons.group_first[arbor + 1]):
            place(axons.group_start[item], turn, position, start)
            for axis in range(3):
                value = wrapped(start[axis] - grid.origin[axis], grid.period[axis])
                step = min(max(np.floor(value / _TILE_UM), -1.0), 4094.0) + 1.0
                key[n] = key[n] * 4096 + np.int64(step)
            pre[n], group[n] = index, item
            n += 1
    return key, pre, group


@kernel
def _axon_places(axons, hits, n):
    """Where each hit sits on the axon, in the arbor's own frame, shape (n, 3)."""
    spots = np.zeros((n, 3))
    for i in range(n):
        axon, s = hits.axon[i], hits.axon_fraction[i]
        for axis in range(3):
            start = axons.start[axon, axis]
            spots[i, axis] = start + s * (axons.end[axon, axis] - start)
    return spots


@kernel
def _grow_sites(sites):
    return Sites(
        _longer(sites.axon),
        _longer(sites.target),
        _longer(sites.axon_fraction),
        _longer(sites.target_fraction),
        _longer(sites.gap),
    )


@kernel
def _append_sites(axons, hits, order, low, high, sites, sites_n):
    while sites_n + high - low > sites.axon.size:
        sites = _grow_sites(sites)
    for i in range(low, high):
        hit = order[i]
        sites.axon[sites_n] = axons.segment[hits.axon[hit]]
        sites.target[sites_n] = hits.target[hit]
        sites.axon_fraction[sites_n] = hits.axon_fraction[hit]
        sites.target_fraction[sites_n] = hits.target_fraction[hit]
        sites.gap[sites_n] = hits.gap[hit]
        sites_n += 1
    return sites, sites_n


@kernel
def _new_sites(size):
    return Sites(
        np.zeros(size, np.int32),
        np.zeros(size, np.int32),
        np.zeros(size, np.float32),
        np.zeros(size, np.float32),
        np.zeros(size, np.float32),
    )


@kernel
def _new_work(layers):
    """Allocate the memory that a task uses again and again."""
    most = 0
    for layer in layers:
        most = max(most, layer.most)
    return Work(
        np.zeros((2, 3)),
        np.zeros(3),
        np.zeros(3, np.float32),
        np.zeros(3, np.float32),
        np.zeros(8 * (most // 8 + 2), np.uint8),
        np.zeros(most, np.int32),
        np.zeros((8, most), np.float32),
        np.zeros(most, np.int32),
    )


@kernel
def _all_hits(axons, layers, placed, rules, pre_cells, own, pre, group):
    """Collect the hits of the listed groups of axons."""
    work, hits, n = _new_work(layers), _new_hits(4096), 0
    for i in range(pre.size):
        cell, here = pre_cells[pre[i]], own[pre[i]]
        for layer in layers:
            hits, n = _collect(
                axons, layer, placed, rules, here, cell, pre[i], group[i], work, hits, n
            )
    return hits, n


@kernel
def search(axons, layers, placed, rules, cells, pre_cells, own, pre_of, group_of):
    """Find the appositions of the axons of `pre_cells` on the targets of `cells`.

    `layers` is a tuple of Layer made for `cells`; `own` gives each presynaptic cell's
    place in `cells`, -1 if absent; `pre_of` and `group_of` list the groups of their
    axons in any order. Returns Pairs (by presynaptic cell in the order given, then in
    the order of `cells`) and their Sites.
    """
    hits, n = _all_hits(axons, layers, placed, rules, pre_cells, own, pre_of, group_of)
    spots = _axon_places(axons, hits, n)
    by_pre, pre_first = np.zeros(n, np.int64), np.zeros(pre_cells.size + 1, np.int64)
    sorted_by(hits.pre, np.arange(n), pre_first, by_pre)
    sites, sites_n, pairs_n = _new_sites(4096), 0, 0
    post, pre_out = np.zeros(1024, np.int32), np.zeros(1024, np.int32)
    count, first = np.zeros(1024, np.int32), np.zeros(cells.size + 1, np.int64)
    order = np.zeros(n, np.int64)
    for pre in range(pre_cells.size):
        mine = by_pre[pre_first[pre] : pre_first[pre + 1]]
        sorted_by(hits.owner, mine, first, order)
        for owner in range(cells.size):
            low, high = first[owner], first[owner + 1]
            if low == high:
                continue
            sort_hits(order, low, high, hits.gap, hits.axon, hits.target)
            kept = thin(order, low, high, spots, rules.min_spacing)
            sites, sites_n = _append_sites(
                axons, hits, order, low, low + kept, sites, sites_n
            )
            if pairs_n == post.size:
                post, pre_out, count = _longer(post), _longer(pre_out), _longer(count)
            post[pairs_n], pre_out[pairs_n] = cells[owner], pre_cells[pre]
            count[pairs_n] = kept
            pairs_n += 1
    return (
        Pairs(post[:pairs_n].copy(), pre_out[:pairs_n].copy(), count[:pairs_n].copy()),
        Sites(
            sites.axon[:sites_n].copy(),
            sites.target[:sites_n].copy(),
            sites.axon_fraction[:sites_n].copy(),
            sites.target_fraction[:sites_n].copy(),
            sites.gap[:sites_n].copy(),
        ),
    )
