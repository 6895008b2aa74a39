"""Stand-in arbors: trees that balance wire against path length, in given envelopes.

The growth rule is that of Cuntz, Forstner, Borst & Haeusser 2010 (PLoS Comput Biol
6:e1000877): carrier points are joined one after another, each time the pair of a joined
and a free point that costs least, cost = wire + balance x path length to the soma.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from circuitgen import __version__
from circuitgen.core.draws import uniforms
from circuitgen.morphology.arbor import Kind
from circuitgen.morphology.describe import GrowthDescription, Tree, read_growth
from circuitgen.morphology.swc import write_swc

STEP_UM = 3.6
_STEM_UM = 14.0
_TRUNK_STEP_UM = 30.0
_MOST_CHILDREN = 2
_CABLE_TOLERANCE = 0.03
_MOST_TRIES = 12
_WIGGLE_UM = 1.6
_GOLDEN_ANGLE = np.pi * (3 - np.sqrt(5))
_KINDS = {"axon": Kind.AXON, "basal": Kind.BASAL, "apical": Kind.APICAL}


@dataclass(frozen=True)
class Skeleton:
    """A tree as points (n, 3) and parents (n,), -1 for the soma, parents first."""

    points_um: np.ndarray
    parent: np.ndarray

    @property
    def cable_um(self) -> float:
        """Total length of the straight pieces, that to the soma (origin) included."""
        before = np.vstack([self.points_um, np.zeros(3)])[self.parent]
        return float(np.linalg.norm(self.points_um - before, axis=1).sum())


def balanced_tree(
    points_um: np.ndarray, balance: float, given: Skeleton | None = None
) -> Skeleton:
    """Join carrier points to a tree from the origin by the rule of Cuntz et al. 2010.

    Parameters
    ----------
    points_um : (n, 3)
        Carrier points.
    balance : float
        Weight of path length to the soma against wire.
    given : Skeleton, optional
        A part that is there already, such as stems and a trunk; without one the
        origin itself is joined to, any number of times.

    Returns
    -------
    Skeleton
        The given part first. No point has more than two children.
    """
    start = given or Skeleton(np.zeros((0, 3)), np.zeros(0, int))
    base = len(start.parent)
    everything = np.vstack([start.points_um, points_um])
    parent = np.concatenate([start.parent, np.full(len(points_um), -1)])
    path = np.zeros(len(everything) + 1)
    children = np.zeros(len(everything) + 1, int)
    order = list(range(base))
    for i in range(base):
        above = everything[parent[i]] if parent[i] >= 0 else np.zeros(3)
        path[i] = path[parent[i]] + np.linalg.norm(everything[i] - above)
        children[parent[i]] += 1
    best = np.full(len(everything), np.inf)
    via = np.full(len(everything), -1)

    def offer(node: int) -> None:
        """Let free points consider joining at a node."""
        away = everything - everything[node] if node >= 0 else everything
        cost = np.linalg.norm(away, axis=1) * (1 + balance) + balance * path[node]
        better = cost < best
        best[better], via[better] = cost[better], node

    def reconsider(full: int) -> None:
        """Find another place for free points that meant to join at a full node."""
        lost = np.flatnonzero((via == full) & free)
        nodes = [node for node in order if children[node] < _MOST_CHILDREN]
        away = everything[lost][:, None] - everything[nodes][None]
        cost = np.linalg.norm(away, axis=2) * (1 + balance) + balance * path[nodes]
        best[lost], via[lost] = cost.min(axis=1), np.array(nodes)[cost.argmin(axis=1)]

    free = np.arange(len(everything)) >= base
    for node in range(base) if base else (-1,):
        if children[node] < _MOST_CHILDREN:
            offer(node)
    while free.any():
        chosen = int(np.where(free, best, np.inf).argmin())
        above = int(via[chosen])
        origin = everything[above] if above >= 0 else np.zeros(3)
        parent[chosen] = above
        path[chosen] = path[above] + np.linalg.norm(everything[chosen] - origin)
        free[chosen] = False
        order.append(chosen)
        children[above] += 1
        if above >= 0 and children[above] == _MOST_CHILDREN:
            reconsider(above)
        offer(chosen)
    rank = np.full(len(order) + 1, -1)
    rank[order] = np.arange(len(order))
    return Skeleton(everything[order], rank[parent[order]])


def _carriers(tree: Tree, soma_depth_um: float, n: int, key) -> np.ndarray:
    """Draw n carrier points in the tree's clouds, the same first ones for any n."""
    draws = uniforms(*key, np.arange(n))
    shares = np.cumsum([cloud.share for cloud in tree.clouds])
    which = np.searchsorted(shares / shares[-1], draws[:, 0], side="right")
    points = np.zeros((n, 3))
    up = 2 * draws[:, 1] - 1
    angle = 2 * np.pi * draws[:, 2]
    radius = np.cbrt(draws[:, 3])
    flat = np.sqrt(1 - up**2)
    ball = np.column_stack([flat * np.cos(angle), up, flat * np.sin(angle)])
    ball *= radius[:, None]
    for index, cloud in enumerate(tree.clouds):
        mine = which == index
        half = [cloud.half_width_um, cloud.half_height_um, cloud.half_width_um]
        points[mine] = ball[mine] * half
        points[mine, 1] += cloud.above_soma_um(soma_depth_um)
    return points


def _stems_and_trunk(tree: Tree, soma_depth_um: float, reach: float, key) -> Skeleton:
    """Points at which the tree leaves the soma, and its trunk if it has one."""
    turn, tilt, *_ = uniforms(*key, 0, 1)[0]
    if tree.trunk is not None:
        height = tree.trunk.above_soma_um(soma_depth_um)
        count = max(round(abs(height) / _TRUNK_STEP_UM), 2)
        rise = np.linspace(0, height, count + 1)[1:]
        rise = np.concatenate([[np.sign(height) * (reach + 2)], rise[1:]])
        sway = uniforms(*key, np.arange(count), 2)[:, :2] - 0.5
        side = np.cumsum(sway, axis=0) * 6.0
        points = np.column_stack([side[:, 0], rise, side[:, 1]])
        return Skeleton(points, np.arange(-1, count - 1))
    middle = np.mean([cloud.above_soma_um(soma_depth_um) for cloud in tree.clouds])
    if tree.stems == 1:
        up = np.array([np.clip(np.sign(middle) * (0.6 + 0.4 * tilt), -1, 1)])
    else:
        up = np.linspace(0.75, -0.95, tree.stems) + 0.1 * (tilt - 0.5)
        up = np.clip(up + 0.3 * np.sign(middle) * (abs(middle) > reach), -1, 1)
    angle = 2 * np.pi * turn + _GOLDEN_ANGLE * np.arange(tree.stems)
    flat = np.sqrt(1 - up**2)
    ways = np.column_stack([flat * np.cos(angle), up, flat * np.sin(angle)])
    return Skeleton(ways * (reach + _STEM_UM), np.full(tree.stems, -1))


def _skeleton(tree: Tree, description, depth_um: float, key) -> Skeleton:
    """Grow a tree with as many carrier points as give the cable asked for."""
    given = _stems_and_trunk(tree, depth_um, description.soma_radius_um, key)
    n = max(round(tree.cable_um / 25.0), 8)
    for _ in range(_MOST_TRIES):
        grown = balanced_tree(_carriers(tree, depth_um, n, key), tree.balance, given)
        ratio = tree.cable_um / grown.cable_um
        if abs(ratio - 1) <= _CABLE_TOLERANCE:
            break
        # Length of such a tree grows about as n to the power 2/3.
        n = max(round(n * np.clip(ratio, 0.4, 2.5) ** 1.5), 3)
    return grown


def _runs(parent: np.ndarray) -> list[list[int]]:
    """Unbranched runs of a skeleton, each with the point that it continues."""
    children: dict[int, list[int]] = {}
    for point, above in enumerate(parent.tolist()):
        children.setdefault(above, []).append(point)
    runs, pending = [], [(-1, child) for child in children[-1]]
    while pending:
        above, point = pending.pop()
        run = [above, point]
        while len(children.get(run[-1], ())) == 1:
            run.append(children[run[-1]][0])
        runs.append(run)
        pending += [(run[-1], child) for child in children.get(run[-1], ())]
    return runs


def _smooth(values: np.ndarray, passes: int) -> np.ndarray:
    """Average each value with its neighbours, ends fixed."""
    for _ in range(passes):
        values = values.copy()
        values[1:-1] = (values[:-2] + 2 * values[1:-1] + values[2:]) / 4
    return values


def _natural(corner_points: np.ndarray, key, run: int) -> np.ndarray:
    """Sample a run about every `STEP_UM`, rounded at corners and gently winding."""
    steps = np.linalg.norm(np.diff(corner_points, axis=0), axis=1)
    along = np.concatenate([[0.0], np.cumsum(steps)])
    count = max(round(along[-1] / STEP_UM), 1)
    at = np.linspace(0, along[-1], count + 1)
    points = np.column_stack(
        [np.interp(at, along, corner_points[:, axis]) for axis in range(3)]
    )
    points = _smooth(points, 4)
    noise = uniforms(*key, np.arange(count + 1), 3, run)[:, :3] - 0.5
    noise[[0, -1]] = 0.0
    return points + _smooth(noise * 8.0 * _WIGGLE_UM, 6)


class _Writer:
    """Collects samples in SWC order."""

    def __init__(self, soma_radius_um: float):
        self.rows = [np.array([[1, Kind.SOMA, 0, 0, 0, soma_radius_um, -1]])]
        self.soma_radius_um, self.count = soma_radius_um, 1

    def add(self, tree: Tree, skeleton: Skeleton, key) -> None:
        kind, last, path = _KINDS[tree.kind], {-1: 1}, {-1: 0.0}
        for index, run in enumerate(_runs(skeleton.parent)):
            points = self._points_of(run, skeleton, key, index)
            before = points[0] if run[0] >= 0 else points[1]
            steps = np.diff(np.vstack([before, points[1:]]), axis=0)
            along = path[run[0]] + np.cumsum(np.linalg.norm(steps, axis=1))
            thin = np.exp(-along / tree.taper_um)
            radius = tree.end_radius_um + thin * (
                tree.start_radius_um - tree.end_radius_um
            )
            n = len(along)
            number = self.count + 1 + np.arange(n)
            parent = np.concatenate([[last[run[0]]], number[:-1]])
            columns = (number, np.full(n, kind), *points[1:].T, radius, parent)
            self.rows.append(np.column_stack(columns))
            self.count += n
            last[run[-1]], path[run[-1]] = number[-1], along[-1]

    def _points_of(self, run, skeleton: Skeleton, key, index: int) -> np.ndarray:
        inner = skeleton.points_um[run[1:]]
        if run[0] >= 0:
            return _natural(np.vstack([skeleton.points_um[run[0]], inner]), key, index)
        way = inner[0] / np.linalg.norm(inner[0])
        surface = way * self.soma_radius_um
        return np.vstack(
            [np.zeros(3), _natural(np.vstack([surface, inner]), key, index)]
        )

    def columns(self) -> list[np.ndarray]:
        table = np.concatenate(self.rows)
        whole = (0, 1, 6)
        return [table[:, i].astype(int) if i in whole else table[:, i] for i in range(7)]


def grow(description: GrowthDescription, index: int, seed: int) -> list[np.ndarray]:
    """Grow one stand-in; return the seven columns of an SWC file.

    The same description, index and seed give the same cell.
    """
    depth_um = description.soma_depths_um[index % len(description.soma_depths_um)]
    writer = _Writer(description.soma_radius_um)
    for number, tree in enumerate(description.trees):
        key = (seed, f"growth {description.type} {index} {number} {tree.kind}")
        writer.add(tree, _skeleton(tree, description, depth_um, key), key)
    return writer.columns()


def _header(description, source: Path, index: int, seed: int) -> list[str]:
    depth = description.soma_depths_um[index % len(description.soma_depths_um)]
    return [
        "SYNTHETIC stand-in arbor with invented statistics; not a measured neuron.",
        "For trying out software only: no biological conclusion can rest on it.",
        "Grown by minimum spanning trees that balance wire against path length",
        "(rule: Cuntz et al. 2010, PLoS Comput Biol 6:e1000877), micrometres, y to pia.",
        f"Cell type {description.type}, for a soma {depth:g} um below the pia.",
        f"circuitgen {__version__} grow {source.name}, index {index}, seed {seed}.",
    ]


def grow_files(
    description_path: Path, folder: Path, count: int | None, seed: int | None
) -> list[Path]:
    """Grow stand-ins into SWC files ``TYPE_1.swc``, ``TYPE_2.swc`` and so on.

    Parameters
    ----------
    description_path : Path
        A growth description.
    folder : Path
        Where the files go; existing files of these names are replaced.
    count : int, optional
        How many; one for each of the description's soma depths by default.
    seed : int, optional
        The description's own by default.
    """
    description = read_growth(description_path)
    seed = description.seed if seed is None else seed
    written = []
    for index in range(count or len(description.soma_depths_um)):
        path = Path(folder) / f"{description.type}_{index + 1}.swc"
        columns = grow(description, index, seed)
        write_swc(
            path, _header(description, Path(description_path), index, seed), columns
        )
        written.append(path)
    return written
