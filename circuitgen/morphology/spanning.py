"""Spanning trees that balance wire against path length."""

from __future__ import annotations

import numpy as np


def balanced_tree(
    start_um: np.ndarray,
    start_path_um: np.ndarray,
    points_um: np.ndarray,
    balance: float,
) -> tuple[np.ndarray, np.ndarray]:
    """Join points to a tree, one at a time, each time the cheapest.

    A point p joined to a node q costs ``|pq| + balance * (path(q) + |pq|)``: its wire
    plus the weighted path from the root (Cuntz, Forstner, Borst & Hausser 2010, PLoS
    Comput Biol 6:e1000877). Balance 0 is Prim's minimum spanning tree.

    Parameters
    ----------
    start_um : float64 (k, 3)
        Nodes that are in the tree before the first point.
    start_path_um : float64 (k,)
        Their path length from the root.
    points_um : float64 (n, 3)
        Points to join.
    balance : float
        At least 0.

    Returns
    -------
    order : int64 (n,)
        The points in the order in which they were joined.
    parent : int64 (n,)
        What each was joined to: below k a start node, else k + a place in `order`.
    """
    starts_n, points_n = len(start_um), len(points_um)
    apart = np.linalg.norm(points_um[:, None, :] - start_um[None, :, :], axis=2)
    costs = apart * (1.0 + balance) + balance * start_path_um
    nearest = costs.argmin(axis=1)
    row = np.arange(points_n)
    cost = costs[row, nearest]
    path = start_path_um[nearest] + apart[row, nearest]
    order = np.zeros(points_n, dtype=np.int64)
    parent = np.zeros(points_n, dtype=np.int64)
    for step in range(points_n):
        point = int(cost.argmin())
        order[step], parent[step] = point, nearest[point]
        cost[point] = np.inf
        away = points_um - points_um[point]
        apart_new = np.sqrt((away * away).sum(axis=1))
        cost_new = apart_new * (1.0 + balance) + balance * path[point]
        better = (cost_new < cost) & np.isfinite(cost)
        cost[better] = cost_new[better]
        path[better] = path[point] + apart_new[better]
        nearest[better] = starts_n + step
    return order, parent
