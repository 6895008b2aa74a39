"""Compiled loops that put targets in place and sort them by voxel."""

from __future__ import annotations

import numpy as np

from circuitgen.core.compilation import kernel


@kernel
def place(local, turn, position, out):
    """Turn a point of the arbor's frame about z and move it to the cell's place."""
    out[0] = turn[0] * local[0] - turn[1] * local[1] + position[0]
    out[1] = turn[1] * local[0] + turn[0] * local[1] + position[1]
    out[2] = local[2] + position[2]


@kernel
def wrapped(value, period):
    """Bring a coordinate into [0, period); leave it where the period is 0."""
    return value - period * np.floor(value / period) if period > 0.0 else value


@kernel
def _voxel_of(middle, grid):
    """Index of the voxel that holds a point given relative to the grid's origin."""
    index = 0
    for axis in range(3):
        step = int(np.floor(middle[axis] / grid.size[axis]))
        index = index * grid.shape[axis] + min(max(step, 0), grid.shape[axis] - 1)
    return index


@kernel
def middle_of(start, end, grid, middle):
    """Middle of a segment relative to the grid's origin, periods taken out."""
    for axis in range(3):
        value = 0.5 * (start[axis] + end[axis]) - grid.origin[axis]
        middle[axis] = wrapped(value, grid.period[axis])


@kernel
def count_targets(targets, placed, cells, grid, first):
    """Set `first` (voxels + 1) to the running number of targets up to each voxel."""
    start, end, middle = np.zeros(3), np.zeros(3), np.zeros(3)
    for cell in cells:
        arbor, turn, position = (
            placed.arbor[cell],
            placed.turn[cell],
            placed.position[cell],
        )
        for row in range(targets.first[arbor], targets.first[arbor + 1]):
            place(targets.start[row], turn, position, start)
            place(targets.end[row], turn, position, end)
            middle_of(start, end, grid, middle)
            first[_voxel_of(middle, grid)] += 1
    total = 0
    for voxel in range(first.size):
        total += first[voxel]
        first[voxel] = total


@kernel
def fill_layer(targets, placed, cells, layer):
    """Write every target into its voxel's rows; `first` ends as where voxels begin."""
    start, end, middle, grid = np.zeros(3), np.zeros(3), np.zeros(3), layer.grid
    for index in range(cells.size - 1, -1, -1):
        cell = cells[index]
        arbor, turn, position = (
            placed.arbor[cell],
            placed.turn[cell],
            placed.position[cell],
        )
        for row in range(targets.first[arbor + 1] - 1, targets.first[arbor] - 1, -1):
            place(targets.start[row], turn, position, start)
            place(targets.end[row], turn, position, end)
            middle_of(start, end, grid, middle)
            voxel = _voxel_of(middle, grid)
            layer.first[voxel] -= 1
            spot = layer.first[voxel]
            square = 0.0
            for axis in range(3):
                way = end[axis] - start[axis]
                layer.shapes[axis, spot] = middle[axis]
                layer.shapes[3 + axis, spot] = 0.5 * way
                layer.exact[spot, axis] = start[axis]
                layer.exact[spot, 3 + axis] = way
                square += way * way
            first, last = targets.start_radius[row], targets.end_radius[row]
            layer.shapes[6, spot] = 0.5 * np.sqrt(square)
            layer.shapes[7, spot] = max(first, last)
            layer.exact[spot, 6], layer.exact[spot, 7] = first, last - first
            layer.owner[spot], layer.kind[spot] = index, targets.kind[row]
            layer.segment[spot] = targets.segment[row]
