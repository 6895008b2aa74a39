"""Appositions of one block of presynaptic cells: voxels, threads, order of rows."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from circuitgen.appositions.index_kernels import count_targets, fill_layer
from circuitgen.appositions.kernels import list_groups, search
from circuitgen.appositions.records import Grid, Layer, Rules
from circuitgen.appositions.scene import Scene

_VOXEL_SHARE = 1.4
_MOST_VOXELS = 64_000_000
_CELLS_PER_TASK = 48
# Largest relative error of a single-precision coordinate, with room for a few sums.
_SINGLE_ERROR = 1e-6


@dataclass(frozen=True)
class Appositions:
    """Ordered pairs with at least one apposition, and their sites.

    Pairs are sorted by presynaptic, then postsynaptic cell; the sites of pair i are
    rows ``first[i]:first[i + 1]``, closest first.

    Attributes
    ----------
    pre, post : int32 (pairs,)
        Cell ids.
    first : int64 (pairs + 1,)
        Where the sites of each pair begin.
    pre_segment, post_segment : int32 (sites,)
        Segments of the two arbors.
    pre_fraction, post_fraction : float32 (sites,)
        Place along each segment, 0 at its start and 1 at its end.
    gap_um : float32 (sites,)
        Distance between the surfaces, 0 where they meet.
    """

    pre: np.ndarray
    post: np.ndarray
    first: np.ndarray
    pre_segment: np.ndarray
    post_segment: np.ndarray
    pre_fraction: np.ndarray
    post_fraction: np.ndarray
    gap_um: np.ndarray

    @property
    def count(self) -> np.ndarray:
        """Appositions of each pair."""
        return np.diff(self.first)


def _box_of(scene: Scene, cells: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Lowest and highest corner of a box around the centre lines of `cells`."""
    arbor, position = scene.placed.arbor[cells], scene.placed.position[cells]
    side = scene.reach.side_um[arbor]
    low = position + np.column_stack([-side, -side, scene.reach.lowest_um[arbor]])
    high = position + np.column_stack([side, side, scene.reach.highest_um[arbor]])
    return low.min(axis=0), high.max(axis=0)


def _make_grid(scene: Scene, cells: np.ndarray, reach_um: float) -> Grid:
    """Lay voxels of about the reach over some cells; a period holds whole ones."""
    low, high = _box_of(scene, cells)
    period = np.array([*scene.wrap_um, 0.0])
    extent = np.where(period > 0, period, high - low + 1e-3)
    # Rows run along z: thin voxels there cost nothing but their number.
    wanted = _VOXEL_SHARE * reach_um * np.array([1.0, 1.0, 0.5])
    wanted *= max(1.0, np.cbrt((extent / wanted).prod() / _MOST_VOXELS))
    shape = np.where(period > 0, np.floor(extent / wanted), np.ceil(extent / wanted))
    shape = np.maximum(shape, 1).astype(np.int64)
    sizes = np.where(period > 0, extent / shape, wanted)
    return Grid(origin=low, size=sizes, shape=shape, period=period)


def _most_rows(scene: Scene, grid: Grid, first, reach_um: float) -> int:
    """Bound the rows that one group of axon segments can be near to.

    A group looks at no more columns of voxels than its reach spans, and at no more
    rows of each than the fullest column holds.
    """
    axons = scene.axons
    if not axons.group_radius.size:
        return 0
    half = np.linalg.norm(axons.group_end - axons.group_start, axis=1) / 2
    extent = (half + axons.group_radius).max() + reach_um + scene.max_gap_um + 1.0
    columns = np.prod(np.floor(2 * extent / grid.size[:2]) + 2)
    depth = grid.shape[2]
    fullest = np.diff(first[depth - 1 :: depth], prepend=0).max()
    return int(columns * fullest)


def _make_layer(scene, targets, cells) -> Layer:
    """Sort the targets of one layer by voxel."""
    radius = np.maximum(targets.start_radius, targets.end_radius)
    half_length = np.linalg.norm(targets.end - targets.start, axis=1) / 2
    reach_um = float((radius + half_length).max())
    grid = _make_grid(scene, cells, reach_um + scene.max_gap_um)
    first = np.zeros(int(grid.shape.prod()) + 1, np.int32)
    count_targets(targets, scene.placed, cells, grid, first)
    n = int(first[-1])
    layer = Layer(
        grid=grid,
        first=first,
        shapes=np.zeros((8, n), np.float32),
        exact=np.zeros((n, 8)),
        owner=np.zeros(n, np.int32),
        segment=np.zeros(n, np.int32),
        kind=np.zeros(n, np.uint8),
        reach=reach_um,
        most=min(n, _most_rows(scene, grid, first, reach_um)),
    )
    fill_layer(targets, scene.placed, cells, layer)
    return layer


def _slack_um(scene: Scene, layers) -> float:
    """Room for the rounding of single-precision coordinates in the widest layer."""
    extents = [(layer.grid.shape * layer.grid.size).max() for layer in layers]
    return _SINGLE_ERROR * max(extents)


@dataclass(frozen=True)
class TargetIndex:
    """The targets of some cells sorted by voxel, ready for any number of searches."""

    scene: Scene
    cells: np.ndarray
    layers: tuple


def reachable_cells(scene: Scene, pre_cells: np.ndarray) -> np.ndarray:
    """Return the cells whose boxes meet the box around the axons of `pre_cells`."""
    everyone = np.arange(scene.placed.arbor.size)
    low, high = _box_of(scene, pre_cells)
    arbor, position = scene.placed.arbor, scene.placed.position
    side, margin = scene.reach.side_um[arbor], scene.reach.thickest_um + scene.max_gap_um
    near = np.ones(everyone.size, bool)
    for axis, period in enumerate(scene.wrap_um):
        if period == 0:
            near &= position[:, axis] + side + margin >= low[axis]
            near &= position[:, axis] - side - margin <= high[axis]
    return everyone[near]


def index_targets(scene: Scene, cells: np.ndarray) -> TargetIndex:
    """Sort the targets of `cells` (increasing ids) by voxel."""
    cells = np.asarray(cells, dtype=np.int64)
    layers = tuple(_make_layer(scene, part, cells) for part in scene.targets)
    return TargetIndex(scene, cells, layers)


def _search_task(index: TargetIndex, rules, pre_cells: np.ndarray):
    """Search the axons of a few cells, group by group in order of place.

    Groups that are neighbours look at the same targets, which so stay in the
    processor's cache. The order changes no result.
    """
    scene = index.scene
    own = np.searchsorted(index.cells, pre_cells)
    own = np.minimum(own, index.cells.size - 1)
    own = np.where(index.cells[own] == pre_cells, own, -1)
    tile, pre, group = list_groups(
        scene.axons, scene.placed, pre_cells, index.layers[0].grid
    )
    order = np.argsort(tile, kind="stable")
    return search(
        scene.axons,
        index.layers,
        scene.placed,
        rules,
        index.cells,
        pre_cells,
        own,
        pre[order],
        group[order],
    )


def _search_tasks(index: TargetIndex, rules, pre_cells, threads: int):
    """Search axons in tasks of a few cells; results in order of the tasks."""
    tasks = [
        pre_cells[begin : begin + _CELLS_PER_TASK]
        for begin in range(0, pre_cells.size, _CELLS_PER_TASK)
    ]
    pool = ThreadPoolExecutor(threads)
    try:
        return list(pool.map(lambda pre: _search_task(index, rules, pre), tasks))
    finally:
        # On an interrupt the tasks under way end by themselves; no new one begins.
        pool.shutdown(cancel_futures=True)


def _joined(results) -> Appositions:
    """Join the tasks' results, which are in order already."""
    pairs = [np.concatenate(part) for part in zip(*(r[0] for r in results), strict=True)]
    sites = [np.concatenate(part) for part in zip(*(r[1] for r in results), strict=True)]
    post, pre, count = pairs
    axon, target, axon_fraction, target_fraction, gap = sites
    return Appositions(
        pre=pre,
        post=post,
        first=np.concatenate([[0], np.cumsum(count, dtype=np.int64)]),
        pre_segment=axon,
        post_segment=target,
        pre_fraction=axon_fraction,
        post_fraction=target_fraction,
        gap_um=gap,
    )


def find_appositions(
    index: TargetIndex, pre_cells: np.ndarray, threads: int | None = None
) -> Appositions:
    """Find every apposition of the axons of `pre_cells` on the targets of an index.

    The answer for a pair depends on its two cells alone: not on the block, on the
    threads, or on the other cells.

    Parameters
    ----------
    index : TargetIndex
        From `index_targets`; of all cells that the axons may reach.
    pre_cells : int array
        Presynaptic cells of the block, increasing.
    threads : int, optional
        Threads that search at once; the machine's cores by default.
    """
    scene = index.scene
    rules = Rules(
        max_gap=scene.max_gap_um,
        min_spacing=scene.min_spacing_um,
        slack=_slack_um(scene, index.layers),
        autapses=scene.autapses,
    )
    pre_cells = np.asarray(pre_cells, dtype=np.int64)
    return _joined(
        _search_tasks(index, rules, pre_cells, threads or os.cpu_count() or 1)
    )
