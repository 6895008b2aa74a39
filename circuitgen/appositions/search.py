"""Appositions of one block of postsynaptic cells: voxels, threads, order of rows."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from circuitgen.appositions import kernels
from circuitgen.appositions.scene import Scene

_VOXEL_SHARE = 1.0
_MOST_VOXELS = 64_000_000
_CELLS_PER_TASK = 32
# Largest relative error of a single-precision coordinate, with room for a few sums.
_SINGLE_ERROR = 1e-6


@dataclass(frozen=True)
class Appositions:
    """Ordered pairs with at least one apposition, and their sites.

    Pairs are sorted by postsynaptic, then presynaptic cell; the sites of pair i are
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


def _make_grid(scene: Scene, cells: np.ndarray, reach_um: float) -> kernels.Grid:
    """Lay voxels of about half the reach over a block; a period holds whole voxels."""
    low, high = _box_of(scene, cells)
    period = np.array([*scene.wrap_um, 0.0])
    extent = np.where(period > 0, period, high - low + 1e-3)
    size = max(_VOXEL_SHARE * reach_um, np.cbrt(extent.prod() / _MOST_VOXELS))
    shape = np.where(period > 0, np.floor(extent / size), np.ceil(extent / size))
    shape = np.maximum(shape, 1).astype(np.int64)
    sizes = np.where(period > 0, extent / shape, size)
    return kernels.Grid(origin=low, size=sizes, shape=shape, period=period)


def _make_layer(scene, targets, cells) -> kernels.Layer:
    """Sort the targets of a block by voxel."""
    radius = np.maximum(targets.start_radius, targets.end_radius)
    half_length = np.linalg.norm(targets.end - targets.start, axis=1) / 2
    reach_um = float((radius + half_length).max())
    grid = _make_grid(scene, cells, reach_um + scene.max_gap_um)
    first = np.zeros(int(grid.shape.prod()) + 1, np.int32)
    kernels.count_targets(targets, scene.placed, cells, grid, first)
    n = int(first[-1])
    layer = kernels.Layer(
        grid=grid,
        first=first,
        shapes=np.zeros((8, n), np.float32),
        owner=np.zeros(n, np.int32),
        row=np.zeros(n, np.int32),
        kind=np.zeros(n, np.uint8),
        reach=reach_um,
        longest=int(np.diff(first[grid.shape[2] - 1 :: grid.shape[2]], prepend=0).max()),
    )
    kernels.fill_layer(targets, scene.placed, cells, layer)
    return layer


def _slack_um(scene: Scene, layers) -> float:
    """Room for the rounding of single-precision coordinates in the widest layer."""
    extents = [(layer.grid.shape * layer.grid.size).max() for _, layer in layers]
    return _SINGLE_ERROR * max(extents)


def _search_tasks(scene, layers, rules, cells, threads):
    """Search all axons in tasks of a few cells; results in order of the tasks."""
    everyone = np.arange(scene.placed.arbor.size)
    tasks = [
        everyone[begin : begin + _CELLS_PER_TASK]
        for begin in range(0, everyone.size, _CELLS_PER_TASK)
    ]
    world = (scene.axons, layers, scene.placed, rules, cells)
    pool = ThreadPoolExecutor(threads)
    try:
        return list(pool.map(lambda pre: kernels.search(*world, pre), tasks))
    finally:
        # On an interrupt the tasks under way end by themselves; no new one begins.
        pool.shutdown(cancel_futures=True)


def _in_order(results, cells: np.ndarray) -> Appositions:
    """Join the tasks' results, sorted by postsynaptic, then presynaptic cell."""
    pairs = [np.concatenate(part) for part in zip(*(r[0] for r in results), strict=True)]
    sites = [np.concatenate(part) for part in zip(*(r[1] for r in results), strict=True)]
    post, pre, count = pairs
    order = np.argsort(post, kind="stable")
    begin = (np.cumsum(count, dtype=np.int64) - count)[order]
    sorted_sites = []
    for source in sites:
        out = np.zeros_like(source)
        kernels.gather_runs(begin, count[order], source, out)
        sorted_sites.append(out)
    axon, target, axon_fraction, target_fraction, gap = sorted_sites
    return Appositions(
        pre=pre[order],
        post=cells[post[order]].astype(np.int32),
        first=np.concatenate([[0], np.cumsum(count[order], dtype=np.int64)]),
        pre_segment=axon,
        post_segment=target,
        pre_fraction=axon_fraction,
        post_fraction=target_fraction,
        gap_um=gap,
    )


def find_appositions(
    scene: Scene, cells: np.ndarray | None = None, threads: int | None = None
) -> Appositions:
    """Find every apposition of all axons on the targets of a block of cells.

    The answer for a pair depends on its two cells alone: not on the block, on the
    threads, or on the other cells.

    Parameters
    ----------
    scene : Scene
        Cells in place, from `make_scene`.
    cells : int array, optional
        Postsynaptic cells of the block, increasing; all cells by default.
    threads : int, optional
        Threads that search at once; the machine's cores by default.
    """
    everyone = np.arange(scene.placed.arbor.size)
    cells = everyone if cells is None else np.asarray(cells, dtype=np.int64)
    layers = tuple(
        (targets, _make_layer(scene, targets, cells)) for targets in scene.targets
    )
    rules = kernels.Rules(
        max_gap=scene.max_gap_um,
        min_spacing=scene.min_spacing_um,
        slack=_slack_um(scene, layers),
        autapses=scene.autapses,
    )
    results = _search_tasks(scene, layers, rules, cells, threads or os.cpu_count())
    return _in_order(results, cells)
