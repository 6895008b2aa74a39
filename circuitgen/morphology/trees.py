"""Trees as arrays of parent indices, -1 for roots: whole-array steps, no recursion."""

from __future__ import annotations

import numpy as np


def nearest_stop(parent: np.ndarray, stop: np.ndarray) -> np.ndarray:
    """Return for every sample the nearest of itself and its ancestors that is a stop.

    Roots are stops. Every step doubles the leap, so chains of any length are quick.
    """
    here = np.arange(parent.size)
    leap = np.where(stop | (parent < 0), here, parent)
    while True:
        further = leap[leap]
        if (further == leap).all():
            return leap
        leap = further


def root_of(parent: np.ndarray) -> np.ndarray:
    """Return the root of every sample."""
    return nearest_stop(parent, np.zeros(parent.size, bool))


def depth_of(parent: np.ndarray) -> np.ndarray:
    """Return how many ancestors every sample has, -1 if a cycle is among them."""
    n = parent.size
    leap = np.append(np.where(parent < 0, n, parent), n)
    depth = (leap < n).astype(np.int64)
    for _ in range(n.bit_length() + 1):
        if (leap == n).all():
            break
        depth += depth[leap]
        leap = leap[leap]
    return np.where(leap[:-1] == n, depth[:-1], -1)


def order_from_roots(parent: np.ndarray) -> np.ndarray:
    """Order samples with parents before children, leaving out those above a cycle.

    An order that has parents first already is kept.
    """
    here = np.arange(parent.size)
    if (parent < here).all():
        return here
    depth = depth_of(parent)
    order = np.argsort(depth, kind="stable")
    return order[depth[order] >= 0]


def cycles_of(parent: np.ndarray) -> list[np.ndarray]:
    """Return the members of every cycle, each cycle from its first member on."""
    seen = depth_of(parent) >= 0
    cycles = []
    for start in np.flatnonzero(~seen).tolist():
        trail, here = [], start
        while not seen[here]:
            seen[here] = True
            trail.append(here)
            here = int(parent[here])
        if here in trail:
            members = np.array(trail[trail.index(here) :])
            cycles.append(np.roll(members, -int(members.argmin())))
    return cycles


def children_n(parent: np.ndarray) -> np.ndarray:
    """Return how many children every sample has."""
    return np.bincount(parent[parent >= 0], minlength=parent.size)
