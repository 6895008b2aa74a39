"""Compiled loops of the apposition search: arrays in, arrays out.

Two rasterisations meet in voxels. Target capsules, widened by the largest gap and by
an allowance for the axon's radius, are listed in every voxel that they cross; an axon
capsule then looks into the voxels that its own line crosses. A candidate is rejected
by a bound in single precision that can only err on the side of keeping it; what is
left is decided in double precision from the cells' own frames, so that an answer
never depends on how the work was cut into blocks.
"""

from __future__ import annotations

from collections import namedtuple

import numpy as np

from circuitgen.core.compilation import kernel

# Capsules of all arbors, one after another. Arrays by segment: start, end (n, 3),
# radii (n,), index of the segment in its arbor. `first` (arbors + 1): where each
# arbor begins. Axons also come in runs of neighbours with a bounding sphere each.
Axons = namedtuple(
    "Axons",
    "first start end start_radius end_radius segment reach run_first run_bounds"
    " run_center run_radius",
)
Targets = namedtuple("Targets", "first start end start_radius end_radius segment kind")
# Cells: arbor (n,), position (n, 3), turn (n, 2) = cosine and sine of the azimuth,
# mask (n,) = bits of the target kinds that the cell's axon may contact.
Placed = namedtuple("Placed", "arbor position turn mask")
# Targets of one block in voxels. Single-precision copies are relative to `origin`:
# middle (n, 3), half (n, 3), half_length (n,), radius (n,); `cell` and `row` lead back
# to the cell and to the row in Targets. Voxel v lists entries[first[v]:first[v + 1]].
Voxels = namedtuple(
    "Voxels",
    "origin size shape first entries middle half half_length radius cell row kind",
)
# max_gap, min_spacing, allowance for the axon's radius, slack of single precision,
# wrap lengths in x and y (0: open), autapses allowed.
Rules = namedtuple(
    "Rules", "max_gap min_spacing allowance slack slack32 wrap_x wrap_y autapses"
)

# What one axon came close to: cell in the block, rows of axon and target, gap, and the
# fractions along both segments.
Hits = namedtuple("Hits", "owner axon target gap axon_fraction target_fraction")
# Pairs with at least one site, and their sites one pair after another, closest first.
Sites = namedtuple("Sites", "axon target axon_fraction target_fraction gap")
Pairs = namedtuple("Pairs", "post pre count")

RUN_LENGTH = 16
_OWN_KINDS = np.uint8(12)  # an autapse may sit on basal and apical dendrite only
_PARALLEL = 1e-9
_SHORT_SORT = 16


@kernel
def _place(local, turn, position, out):
    """Turn a point of the arbor's frame about z and move it to the cell's place."""
    out[0] = turn[0] * local[0] - turn[1] * local[1] + position[0]
    out[1] = turn[1] * local[0] + turn[0] * local[1] + position[1]
    out[2] = local[2] + position[2]


@kernel
def _point_to_segment(p, a, b):
    """Squared distance from p to segment ab, and the fraction of the nearest point."""
    along = square = 0.0
    for axis in range(3):
        side = b[axis] - a[axis]
        along += (p[axis] - a[axis]) * side
        square += side * side
    fraction = min(max(along / square, 0.0), 1.0) if square > 0.0 else 0.0
    distance = 0.0
    for axis in range(3):
        nearest = a[axis] + fraction * (b[axis] - a[axis])
        distance += (p[axis] - nearest) ** 2
    return distance, fraction


@kernel
def closest_points(a, b, c, d):
    """Closest approach of segments ab and cd.

    Returns the squared distance and the fractions along ab and cd. The interior
    solution of the two lines stands alone when it lies inside both segments and the
    lines are not nearly parallel; otherwise the four end points compete with it.
    """
    uu = uv = vv = uw = vw = 0.0
    for axis in range(3):
        u, v, w = b[axis] - a[axis], d[axis] - c[axis], c[axis] - a[axis]
        uu += u * u
        uv += u * v
        vv += v * v
        uw += u * w
        vw += v * w
    best, s_best, t_best = np.inf, 0.0, 0.0
    determinant = uu * vv - uv * uv
    if determinant > 0.0:
        s = (uw * vv - uv * vw) / determinant
        t = (uv * s - vw) / vv
        if 0.0 <= s <= 1.0 and 0.0 <= t <= 1.0:
            best, s_best, t_best = 0.0, s, t
            for axis in range(3):
                p = a[axis] + s * (b[axis] - a[axis])
                q = c[axis] + t * (d[axis] - c[axis])
                best += (p - q) ** 2
            if determinant > _PARALLEL * uu * vv:
                return best, s_best, t_best
    for end in range(2):
        distance, t = _point_to_segment(b if end else a, c, d)
        if distance < best:
            best, s_best, t_best = distance, float(end), t
        distance, s = _point_to_segment(d if end else c, a, b)
        if distance < best:
            best, s_best, t_best = distance, s, float(end)
    return best, s_best, t_best


@kernel
def segment_distances(a, b, c, d):
    """Distances and fractions for rows of segment pairs, arrays (n, 3) each."""
    out = np.zeros((a.shape[0], 3))
    for row in range(a.shape[0]):
        square, s, t = closest_points(a[row], b[row], c[row], d[row])
        out[row, 0] = np.sqrt(square)
        out[row, 1] = s
        out[row, 2] = t
    return out


@kernel
def _crosses(offset, half, square, size, reach):
    """Tell whether a capsule may cross a voxel, never wrongly 'no'.

    `offset` leads from the capsule's middle to the voxel's centre. The support of the
    cube along the perpendicular from the line bounds the distance from below.
    """
    along = offset[0] * half[0] + offset[1] * half[1] + offset[2] * half[2]
    fraction = min(max(along / square, -1.0), 1.0) if square > 0.0 else 0.0
    x = offset[0] - fraction * half[0]
    y = offset[1] - fraction * half[1]
    z = offset[2] - fraction * half[2]
    distance = np.sqrt(x * x + y * y + z * z)
    return distance * (distance - reach) <= 0.5 * size * (abs(x) + abs(y) + abs(z))


@kernel
def _voxel_range(middle, half, reach, size, shape, axis):
    """First and last voxel along an axis that the capsule's box touches."""
    extent = abs(half[axis]) + reach
    low = int(np.floor((middle[axis] - extent) / size))
    high = int(np.floor((middle[axis] + extent) / size))
    return max(low, 0), min(high, shape[axis] - 1)


@kernel
def place_targets(targets, placed, cells, origin):
    """Place the targets of `cells` and keep single-precision copies from `origin`."""
    total = 0
    for cell in cells:
        arbor = placed.arbor[cell]
        total += targets.first[arbor + 1] - targets.first[arbor]
    middle = np.zeros((total, 3), np.float32)
    half = np.zeros((total, 3), np.float32)
    half_length = np.zeros(total, np.float32)
    radius = np.zeros(total, np.float32)
    owner = np.zeros(total, np.int32)
    row = np.zeros(total, np.int32)
    kind = np.zeros(total, np.uint8)
    start, end = np.zeros(3), np.zeros(3)
    out = 0
    for index in range(cells.size):
        cell = cells[index]
        arbor = placed.arbor[cell]
        for source in range(targets.first[arbor], targets.first[arbor + 1]):
            _place(
                targets.start[source], placed.turn[cell], placed.position[cell], start
            )
            _place(targets.end[source], placed.turn[cell], placed.position[cell], end)
            square = 0.0
            for axis in range(3):
                middle[out, axis] = 0.5 * (start[axis] + end[axis]) - origin[axis]
                half[out, axis] = 0.5 * (end[axis] - start[axis])
                square += (0.5 * (end[axis] - start[axis])) ** 2
            half_length[out] = np.sqrt(square)
            radius[out] = max(targets.start_radius[source], targets.end_radius[source])
            owner[out], row[out], kind[out] = index, source, targets.kind[source]
            out += 1
    return middle, half, half_length, radius, owner, row, kind


@kernel
def count_entries(middle, half, half_length, radius, reach, size, shape, counts):
    """Add to `counts` (voxels,) how many capsules cross each voxel."""
    offset = np.zeros(3)
    for item in range(radius.size):
        wide = radius[item] + reach
        square = float(half_length[item]) ** 2
        x_low, x_high = _voxel_range(middle[item], half[item], wide, size, shape, 0)
        y_low, y_high = _voxel_range(middle[item], half[item], wide, size, shape, 1)
        z_low, z_high = _voxel_range(middle[item], half[item], wide, size, shape, 2)
        for x in range(x_low, x_high + 1):
            offset[0] = (x + 0.5) * size - middle[item, 0]
            for y in range(y_low, y_high + 1):
                offset[1] = (y + 0.5) * size - middle[item, 1]
                for z in range(z_low, z_high + 1):
                    offset[2] = (z + 0.5) * size - middle[item, 2]
                    if _crosses(offset, half[item], square, size, wide):
                        counts[(x * shape[1] + y) * shape[2] + z] += 1


@kernel
def fill_entries(middle, half, half_length, radius, reach, size, shape, first, entries):
    """Write the list of every voxel; `first` (voxels + 1) ends as it began."""
    offset = np.zeros(3)
    for item in range(radius.size - 1, -1, -1):
        wide = radius[item] + reach
        square = float(half_length[item]) ** 2
        x_low, x_high = _voxel_range(middle[item], half[item], wide, size, shape, 0)
        y_low, y_high = _voxel_range(middle[item], half[item], wide, size, shape, 1)
        z_low, z_high = _voxel_range(middle[item], half[item], wide, size, shape, 2)
        for x in range(x_low, x_high + 1):
            offset[0] = (x + 0.5) * size - middle[item, 0]
            for y in range(y_low, y_high + 1):
                offset[1] = (y + 0.5) * size - middle[item, 1]
                for z in range(z_low, z_high + 1):
                    offset[2] = (z + 0.5) * size - middle[item, 2]
                    if _crosses(offset, half[item], square, size, wide):
                        voxel = (x * shape[1] + y) * shape[2] + z
                        first[voxel] -= 1
                        entries[first[voxel]] = item


@kernel
def _far_apart(middle, half, half_length, radius, item, voxels, slack):
    """Tell whether an axon capsule surely stays clear of a target capsule.

    Along any unit direction w, |m.w| - |u.w| - |v.w| bounds the distance of two
    segments from below (m between the middles, u and v the halves). Two directions
    are tried: between the middles, and perpendicular to both segments.
    """
    mx = voxels.middle[item, 0] - middle[0]
    my = voxels.middle[item, 1] - middle[1]
    mz = voxels.middle[item, 2] - middle[2]
    reach = radius + voxels.radius[item] + slack
    square = mx * mx + my * my + mz * mz
    sphere = half_length + voxels.half_length[item] + reach
    if square > sphere * sphere:
        return True
    ux, uy, uz = half[0], half[1], half[2]
    vx, vy, vz = voxels.half[item, 0], voxels.half[item, 1], voxels.half[item, 2]
    along = abs(ux * mx + uy * my + uz * mz) + abs(vx * mx + vy * my + vz * mz)
    length = np.sqrt(square)
    if square - along > reach * length:
        return True
    nx, ny, nz = uy * vz - uz * vy, uz * vx - ux * vz, ux * vy - uy * vx
    # u and v are perpendicular to n but for rounding, which counts when n is short.
    along = abs(ux * nx + uy * ny + uz * nz) + abs(vx * nx + vy * ny + vz * nz)
    across = abs(mx * nx + my * ny + mz * nz) - along
    return across > 0 and across * across > reach * reach * (nx * nx + ny * ny + nz * nz)


@kernel
def _longer(array):
    """Copy a one-dimensional array into one of twice the size."""
    out = np.zeros(2 * array.size, array.dtype)
    out[: array.size] = array
    return out


@kernel
def _after(gap, axon, target, i, j):
    """Tell whether hit i comes after hit j: by gap, then by the two segments."""
    if gap[i] != gap[j]:
        return gap[i] > gap[j]
    if axon[i] != axon[j]:
        return axon[i] > axon[j]
    return target[i] > target[j]


@kernel
def _sift(order, low, high, root, gap, axon, target):
    while True:
        child = 2 * root + 1
        if child >= high - low:
            return
        if child + 1 < high - low and _after(
            gap, axon, target, order[low + child + 1], order[low + child]
        ):
            child += 1
        if not _after(gap, axon, target, order[low + child], order[low + root]):
            return
        order[low + root], order[low + child] = order[low + child], order[low + root]
        root = child


@kernel
def _sort_hits(order, low, high, gap, axon, target):
    """Sort order[low:high] closest first: insertion when short, else a heap."""
    if high - low <= _SHORT_SORT:
        for i in range(low + 1, high):
            item, j = order[i], i
            while j > low and _after(gap, axon, target, order[j - 1], item):
                order[j] = order[j - 1]
                j -= 1
            order[j] = item
        return
    for root in range((high - low) // 2 - 1, -1, -1):
        _sift(order, low, high, root, gap, axon, target)
    for last in range(high - 1, low, -1):
        order[low], order[last] = order[last], order[low]
        _sift(order, low, last, 0, gap, axon, target)


@kernel
def _thin(order, low, high, place, min_spacing):
    """Keep the closest hit, drop those near it along the axon, repeat.

    Kept hits are moved to the front of order[low:high]; returns how many.
    """
    kept = low
    for i in range(low, high):
        item, clear = order[i], True
        for j in range(low, kept):
            other = order[j]
            square = 0.0
            for axis in range(3):
                square += (place[item, axis] - place[other, axis]) ** 2
            if square < min_spacing * min_spacing:
                clear = False
                break
        if clear:
            order[kept] = item
            kept += 1
    return kept - low


@kernel
def _new_hits(size):
    return Hits(
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
        _longer(hits.owner),
        _longer(hits.axon),
        _longer(hits.target),
        _longer(hits.gap),
        _longer(hits.axon_fraction),
        _longer(hits.target_fraction),
    )


@kernel
def _test(axons, targets, placed, voxels, rules, cells, item, axon, scratch, hits, n):
    """Decide one candidate in double precision; append it when it is close enough.

    `scratch` rows 0 and 1 hold the placed axon segment, 2 and 3 receive the target.
    """
    owner, row = voxels.cell[item], voxels.row[item]
    post = cells[owner]
    _place(targets.start[row], placed.turn[post], placed.position[post], scratch[2])
    _place(targets.end[row], placed.turn[post], placed.position[post], scratch[3])
    square, s, t = closest_points(scratch[0], scratch[1], scratch[2], scratch[3])
    axon_radius = axons.start_radius[axon] + s * (
        axons.end_radius[axon] - axons.start_radius[axon]
    )
    target_radius = targets.start_radius[row] + t * (
        targets.end_radius[row] - targets.start_radius[row]
    )
    gap = max(np.sqrt(square) - axon_radius - target_radius, 0.0)
    if gap > rules.max_gap:
        return hits, n
    if n == hits.owner.size:
        hits = _grow_hits(hits)
    hits.owner[n], hits.axon[n], hits.target[n] = owner, axon, row
    hits.gap[n], hits.axon_fraction[n], hits.target_fraction[n] = gap, s, t
    return hits, n + 1


@kernel
def _look(axons, targets, placed, voxels, rules, cells, pre, axon, work, hits, n):
    """Look for targets around one placed axon segment (scratch rows 0 and 1)."""
    scratch, middle, half, offset, stamps, stamp = work
    square = 0.0
    for axis in range(3):
        middle[axis] = 0.5 * (scratch[0, axis] + scratch[1, axis]) - voxels.origin[axis]
        half[axis] = 0.5 * (scratch[1, axis] - scratch[0, axis])
        square += float(half[axis]) ** 2
    half_length = np.float32(np.sqrt(square))
    thick = np.float32(max(axons.start_radius[axon], axons.end_radius[axon]))
    reach = thick + np.float32(rules.max_gap)
    wide = max(thick - rules.allowance, 0.0) + rules.slack
    size, shape, mask = voxels.size, voxels.shape, placed.mask[pre]
    x_low, x_high = _voxel_range(middle, half, wide, size, shape, 0)
    y_low, y_high = _voxel_range(middle, half, wide, size, shape, 1)
    z_low, z_high = _voxel_range(middle, half, wide, size, shape, 2)
    for x in range(x_low, x_high + 1):
        offset[0] = (x + 0.5) * size - middle[0]
        for y in range(y_low, y_high + 1):
            offset[1] = (y + 0.5) * size - middle[1]
            for z in range(z_low, z_high + 1):
                offset[2] = (z + 0.5) * size - middle[2]
                if not _crosses(offset, half, square, size, wide):
                    continue
                voxel = (x * shape[1] + y) * shape[2] + z
                for place in range(voxels.first[voxel], voxels.first[voxel + 1]):
                    item = voxels.entries[place]
                    if stamps[item] == stamp[0]:
                        continue
                    stamps[item] = stamp[0]
                    if not voxels.kind[item] & mask or _far_apart(
                        middle, half, half_length, reach, item, voxels, rules.slack32
                    ):
                        continue
                    if cells[voxels.cell[item]] == pre and not (
                        rules.autapses and voxels.kind[item] & _OWN_KINDS
                    ):
                        continue
                    hits, n = _test(
                        axons,
                        targets,
                        placed,
                        voxels,
                        rules,
                        cells,
                        item,
                        axon,
                        scratch,
                        hits,
                        n,
                    )
    return hits, n


@kernel
def _clear_of_block(center, radius, turn, position, voxels, place):
    """Tell whether a sphere of the arbor's frame misses the block's box of voxels."""
    _place(center, turn, position, place)
    square = 0.0
    for axis in range(3):
        value = place[axis] - voxels.origin[axis]
        top = voxels.shape[axis] * voxels.size
        beyond = max(-value, value - top, 0.0)
        square += beyond * beyond
    return square > radius * radius


@kernel
def _collect(axons, targets, placed, voxels, rules, cells, pre, position, work, hits, n):
    """Collect the hits of one cell's axon, its soma at `position`."""
    scratch, stamp = work[0], work[5]
    arbor, turn = placed.arbor[pre], placed.turn[pre]
    for run in range(axons.run_first[arbor], axons.run_first[arbor + 1]):
        if _clear_of_block(
            axons.run_center[run],
            axons.run_radius[run] + rules.slack,
            turn,
            position,
            voxels,
            scratch[0],
        ):
            continue
        for axon in range(axons.run_bounds[run], axons.run_bounds[run + 1]):
            _place(axons.start[axon], turn, position, scratch[0])
            _place(axons.end[axon], turn, position, scratch[1])
            stamp[0] += 1
            hits, n = _look(
                axons, targets, placed, voxels, rules, cells, pre, axon, work, hits, n
            )
    return hits, n


@kernel
def _group_by_owner(hits, n, first, order):
    """Order hits by cell of the block; hits of cell i are order[first[i]:first[i+1]]."""
    first[:] = 0
    for i in range(n):
        first[hits.owner[i] + 1] += 1
    for cell in range(first.size - 1):
        first[cell + 1] += first[cell]
    for i in range(n - 1, -1, -1):
        order[first[hits.owner[i] + 1] - 1] = i
        first[hits.owner[i] + 1] -= 1
    for cell in range(first.size - 1):
        first[cell] = first[cell + 1]
    first[first.size - 1] = n


@kernel
def _axon_places(axons, hits, n):
    """Where each hit sits on the axon, in the arbor's own frame, shape (n, 3)."""
    place = np.zeros((n, 3))
    for i in range(n):
        axon, s = hits.axon[i], hits.axon_fraction[i]
        for axis in range(3):
            start = axons.start[axon, axis]
            place[i, axis] = start + s * (axons.end[axon, axis] - start)
    return place


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
def _append_sites(axons, targets, hits, order, low, high, sites, sites_n):
    while sites_n + high - low > sites.axon.size:
        sites = _grow_sites(sites)
    for i in range(low, high):
        hit = order[i]
        sites.axon[sites_n] = axons.segment[hits.axon[hit]]
        sites.target[sites_n] = targets.segment[hits.target[hit]]
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
def _images(length, reach):
    """How many neighbouring copies of a periodic box an axon can come from."""
    return int(np.ceil(reach / length)) if length > 0.0 else 0


@kernel
def _all_images(axons, targets, placed, voxels, rules, cells, pre, work, hits):
    """Collect a cell's hits from the box itself and, under wrap, from its copies."""
    arbor, n = placed.arbor[pre], 0
    position = np.zeros(3)
    span_x = voxels.shape[0] * voxels.size + 2.0 * axons.reach[arbor] + rules.wrap_x
    span_y = voxels.shape[1] * voxels.size + 2.0 * axons.reach[arbor] + rules.wrap_y
    many_x = _images(rules.wrap_x, span_x)
    many_y = _images(rules.wrap_y, span_y)
    for i in range(-many_x, many_x + 1):
        for j in range(-many_y, many_y + 1):
            position[0] = placed.position[pre, 0] + i * rules.wrap_x
            position[1] = placed.position[pre, 1] + j * rules.wrap_y
            position[2] = placed.position[pre, 2]
            hits, n = _collect(
                axons,
                targets,
                placed,
                voxels,
                rules,
                cells,
                pre,
                position,
                work,
                hits,
                n,
            )
    return hits, n


@kernel
def search(axons, targets, placed, voxels, rules, cells, pre_cells):
    """Find the appositions of the axons of `pre_cells` on the cells of one block.

    Returns Pairs (by presynaptic cell in the order given, then by cell of the block,
    `post` counting within the block) and their Sites.
    """
    scratch, stamp = np.zeros((4, 3)), np.zeros(1, np.int32)
    middle, half = np.zeros(3, np.float32), np.zeros(3, np.float32)
    stamps = np.zeros(voxels.radius.size, np.int32)
    work = (scratch, middle, half, np.zeros(3), stamps, stamp)
    hits, sites, sites_n = _new_hits(1024), _new_sites(4096), 0
    post = np.zeros(1024, np.int32)
    pre_out, count = np.zeros(1024, np.int32), np.zeros(1024, np.int32)
    first, pairs_n = np.zeros(cells.size + 1, np.int64), 0
    for pre in pre_cells:
        hits, n = _all_images(
            axons, targets, placed, voxels, rules, cells, pre, work, hits
        )
        order = np.zeros(n, np.int64)
        _group_by_owner(hits, n, first, order)
        place = _axon_places(axons, hits, n)
        for owner in range(cells.size):
            low, high = first[owner], first[owner + 1]
            if low == high:
                continue
            _sort_hits(order, low, high, hits.gap, hits.axon, hits.target)
            kept = _thin(order, low, high, place, rules.min_spacing)
            sites, sites_n = _append_sites(
                axons, targets, hits, order, low, low + kept, sites, sites_n
            )
            if pairs_n == post.size:
                post, pre_out, count = _longer(post), _longer(pre_out), _longer(count)
            post[pairs_n], pre_out[pairs_n], count[pairs_n] = owner, pre, kept
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


@kernel
def gather_runs(begin, length, source, out):
    """Copy runs source[begin[i]:begin[i] + length[i]] one after another into `out`."""
    place = 0
    for i in range(begin.size):
        for j in range(length[i]):
            out[place] = source[begin[i] + j]
            place += 1
