"""From a spanning tree to branches that look natural.

A tree here is a pair of arrays: `position_um` (n, 3) and `parent` (n,), every parent
before its children, -1 where a branch leaves the soma.
"""

from __future__ import annotations

import numpy as np

SAMPLE_UM = 4.0
SMOOTHING_ROUNDS = 14
WAVES_N = 24
WAVE_UM = (24.0, 400.0)
CALM_WAVES = 0.5  # a wave grows to full size over this share of its length
PIA_CALM_UM = 40.0
TAPER = 0.6


def steps_um(position_um: np.ndarray, parent: np.ndarray) -> np.ndarray:
    """Length of the piece that ends at each sample; 0 where it leaves the soma."""
    step = np.linalg.norm(position_um - position_um[parent], axis=1)
    return np.where(parent < 0, 0.0, step)


def resample(position_um: np.ndarray, parent: np.ndarray):
    """Cut every edge into even pieces of about `SAMPLE_UM`."""
    pieces = np.maximum(np.rint(steps_um(position_um, parent) / SAMPLE_UM), 1)
    pieces = pieces.astype(np.int64)
    last = np.cumsum(pieces) - 1
    edge = np.repeat(np.arange(parent.size), pieces)
    piece = np.arange(edge.size) - (last - pieces + 1)[edge] + 1
    before = np.where(parent[edge] < 0, edge, parent[edge])
    share = (piece / pieces[edge])[:, None]
    position = position_um[before] * (1.0 - share) + position_um[edge] * share
    from_edge = np.where(parent[edge] < 0, -1, last[parent[edge]])
    return position, np.where(piece == 1, from_edge, np.arange(edge.size) - 1)


def _children_n(parent: np.ndarray) -> np.ndarray:
    return np.bincount(parent[parent >= 0], minlength=parent.size)


def make_binary(position_um: np.ndarray, parent: np.ndarray) -> np.ndarray:
    """Let third and later children branch off a sibling until each sample has two.

    The last child moves to the first sample of the elder sibling that runs most
    nearly its way, so that stems stay bare and parents stay before children.
    """
    parent = parent.copy()
    children = _children(parent)
    for sample, own in enumerate(children):
        while len(own) > 2:
            moved = own.pop()
            away = position_um[[*own, moved]] - position_um[sample]
            away /= np.linalg.norm(away, axis=1)[:, None] + 1e-9
            sibling = own[int((away[:-1] @ away[-1]).argmax())]
            parent[moved] = sibling
            children[sibling] = sorted([*children[sibling], moved])
    return parent


def _children(parent: np.ndarray) -> list[list[int]]:
    children: list[list[int]] = [[] for _ in parent]
    for child, above in enumerate(parent.tolist()):
        if above >= 0:
            children[above].append(child)
    return children


def prune_twigs(position_um: np.ndarray, parent: np.ndarray, twig_um: float):
    """Remove end branches shorter than `twig_um`; stems always stay."""
    children_n = _children_n(parent)
    step = steps_um(position_um, parent)
    keep = np.ones(parent.size, dtype=bool)
    for tip in np.flatnonzero(children_n == 0):
        sample, twig, length = int(tip), [], 0.0
        while parent[sample] >= 0 and children_n[sample] < 2:
            twig.append(sample)
            length += step[sample]
            sample = int(parent[sample])
        if children_n[sample] >= 2 and length < twig_um:
            keep[twig] = False
            children_n[sample] -= 1
    return _select(position_um, parent, keep)


def _select(position_um: np.ndarray, parent: np.ndarray, keep: np.ndarray):
    number = np.cumsum(keep) - 1
    parent = parent[keep]
    return position_um[keep], np.where(parent < 0, -1, number[parent])


def downstream_um(step_um: np.ndarray, parent: np.ndarray) -> np.ndarray:
    """Cable from each sample to all tips beyond it."""
    total = [0.0] * parent.size
    above, step = parent.tolist(), step_um.tolist()
    for sample in range(parent.size - 1, -1, -1):
        if above[sample] >= 0:
            total[above[sample]] += total[sample] + step[sample]
    return np.array(total)


def path_from_soma_um(position_um: np.ndarray, parent: np.ndarray) -> np.ndarray:
    """Path length from the soma centre to each sample."""
    first = np.sqrt((position_um**2).sum(axis=1))
    step = np.where(parent < 0, first, steps_um(position_um, parent)).tolist()
    above, path = parent.tolist(), [0.0] * parent.size
    for sample in range(parent.size):
        before = path[above[sample]] if above[sample] >= 0 else 0.0
        path[sample] = before + step[sample]
    return np.array(path)


def smooth(position_um: np.ndarray, parent: np.ndarray) -> np.ndarray:
    """Round off corners: each sample moves toward its neighbours' weighted mean.

    Neighbours weigh as the cable beyond them, so that a thin side branch does not
    pull a trunk out of line. Tips and the samples at the soma stay.
    """
    position = position_um.copy()
    inner = parent >= 0
    weight = downstream_um(steps_um(position, parent), parent) + SAMPLE_UM
    above, mine = parent[inner], weight[inner]
    free = inner & (_children_n(parent) > 0)
    total = np.bincount(above, mine, parent.size) + np.where(inner, weight, 0.0)
    total = np.where(total > 0, total, 1.0)[:, None]
    for _ in range(SMOOTHING_ROUNDS):
        pull = np.zeros_like(position)
        pull[inner] = position[above] * mine[:, None]
        for axis in range(3):
            pull[:, axis] += np.bincount(
                above, position[inner, axis] * mine, parent.size
            )
        mean = pull / total
        position[free] += 0.5 * (mean[free] - position[free])
    return position


def bend(
    position_um: np.ndarray,
    parent: np.ndarray,
    slope: float,
    pia_height_um: float,
    waves: np.ndarray,
) -> np.ndarray:
    """Shift every sample by a smooth random field, so that nothing runs straight.

    Parameters
    ----------
    position_um, parent : ndarray
        The tree.
    slope : float
        Root mean square of the field's slope.
    pia_height_um : float
        Height of the pia; shifts toward it fade within `PIA_CALM_UM` of it.
    waves : float64 (2 * WAVES_N, 4)
        Uniform numbers.
    """
    shortest, longest = np.log(WAVE_UM)
    length = np.exp(np.linspace(shortest, longest, WAVES_N))
    along, aside = _directions(waves[:WAVES_N]), _directions(waves[WAVES_N:])
    # Equal slope for every wave: the amplitude grows with the wave's length.
    size = slope * np.sqrt(2.0 / WAVES_N) * length / (2.0 * np.pi)
    phase = (
        2.0 * np.pi * (position_um @ (along / length[:, None]).T + waves[:WAVES_N, 2])
    )
    path = path_from_soma_um(position_um, parent)[:, None]
    calm = np.minimum(path / (CALM_WAVES * length), 1.0)
    shift = (calm * np.sin(phase)) @ (aside * size[:, None])
    below = np.clip((pia_height_um - position_um[:, 1]) / PIA_CALM_UM, 0.0, 1.0)
    shift[:, 1] *= below
    return position_um + shift


def _directions(rows: np.ndarray) -> np.ndarray:
    up = 2.0 * rows[:, 0] - 1.0
    aside, angle = np.sqrt(1.0 - up**2), 2.0 * np.pi * rows[:, 1]
    return np.stack([aside * np.cos(angle), up, aside * np.sin(angle)], axis=1)


def taper(
    position_um: np.ndarray, parent: np.ndarray, start_radius_um, tip_radius_um
) -> np.ndarray:
    """Radius of every sample: thick where much cable lies beyond, thin at tips."""
    beyond = downstream_um(steps_um(position_um, parent), parent)
    share = beyond / max(float(beyond.max()), SAMPLE_UM)
    return tip_radius_um + (start_radius_um - tip_radius_um) * share**TAPER


def depth_first(position_um: np.ndarray, parent: np.ndarray) -> np.ndarray:
    """Order in which each branch's samples follow one another, thickest child first."""
    beyond = downstream_um(steps_um(position_um, parent), parent)
    children = _children(parent)
    order, stack = [], np.flatnonzero(parent < 0)[::-1].tolist()
    while stack:
        sample = stack.pop()
        order.append(sample)
        stack += sorted(children[sample], key=lambda child: (beyond[child], child))
    return np.array(order, dtype=np.int64)
