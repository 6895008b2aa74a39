"""Appositions of one block of postsynaptic cells: voxels, threads, order of rows."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from circuitgen.appositions import kernels
from circuitgen.appositions.scene import Scene

# Voxels of about the reach of a capsule keep lists short and few (see DEVELOPERS.md).
_SMALLEST_VOXEL_UM = 2.0
_MOST_VOXELS = 64_000_000
_MOST_ENTRIES = 2**31 - 1
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
    """Lowest and highest corner of a box around all targets of `cells`."""
    arbor = scene.placed.arbor[cells]
    position = scene.placed.position[cells]
    reach = scene.target_reach
    side = reach.side_um[arbor]
    low = position - np.column_stack([side, side, -reach.below_um[arbor]])
    high = position + np.column_stack([side, side, reach.above_um[arbor]])
    return low.min(axis=0), high.max(axis=0)


def _allowance_um(scene: Scene) -> float:
    """Radius that nine in ten axon segments do not exceed; thicker ones look farther."""
    axons = scene.axons
    if not axons.start.size:
        return 0.0
    return float(np.quantile(np.maximum(axons.start_radius, axons.end_radius), 0.9))


def _make_voxels(scene, cells, allowance_um) -> tuple[kernels.Voxels, float]:
    """List the targets of a block by voxel; also return the slack of its extent."""
    low, high = _box_of(scene, cells)
    slack = _SINGLE_ERROR * max(float((high - low).max()), 1.0)
    margin = scene.max_gap_um + allowance_um + slack
    extent = high - low + 2 * margin
    size = max(_SMALLEST_VOXEL_UM, margin, np.cbrt(extent.prod() / _MOST_VOXELS))
    origin = low - margin
    shape = np.maximum(np.ceil(extent / size), 1).astype(np.int64)
    parts = kernels.place_targets(scene.targets, scene.placed, cells, origin)
    middle, half, half_length, radius, owner, row, kind = parts
    first = np.zeros(int(shape.prod()) + 1, np.int64)
    geometry = (middle, half, half_length, radius, margin, size, shape)
    kernels.count_entries(*geometry, first[:-1])
    np.cumsum(first, out=first)
    if first[-1] > _MOST_ENTRIES:
        raise OverflowError("a block lists too many targets; it must be smaller")
    entries = np.zeros(int(first[-1]), np.int32)
    kernels.fill_entries(*geometry, first, entries)
    voxels = kernels.Voxels(
        origin=origin,
        size=size,
        shape=shape,
        first=first,
        entries=entries,
        middle=middle,
        half=half,
        half_length=half_length,
        radius=radius,
        cell=owner,
        row=row,
        kind=kind,
    )
    return voxels, slack


def _search_tasks(scene, voxels, rules, cells, threads):
    """Search all axons in tasks of a few cells; results in order of the tasks."""
    everyone = np.arange(scene.placed.arbor.size)
    tasks = [
        everyone[begin : begin + _CELLS_PER_TASK]
        for begin in range(0, everyone.size, _CELLS_PER_TASK)
    ]
    world = (scene.axons, scene.targets, scene.placed, voxels, rules, cells)
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
    allowance_um = _allowance_um(scene)
    voxels, slack = _make_voxels(scene, cells, allowance_um)
    rules = kernels.Rules(
        max_gap=scene.max_gap_um,
        min_spacing=scene.min_spacing_um,
        allowance=allowance_um,
        slack=slack,
        slack32=np.float32(slack),
        wrap_x=float(scene.wrap_um[0]),
        wrap_y=float(scene.wrap_um[1]),
        autapses=scene.autapses,
    )
    results = _search_tasks(scene, voxels, rules, cells, threads or os.cpu_count())
    return _in_order(results, cells)
