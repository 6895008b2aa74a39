"""Slow, readable twins of the growth rule."""

import numpy as np


def balanced_tree(start_um, start_path_um, points_um, balance):
    """Join the cheapest point to the cheapest node, trying all of both each time."""
    nodes = [tuple(place) for place in start_um]
    paths = list(start_path_um)
    waiting = dict(enumerate(points_um))
    order, parent = [], []
    while waiting:
        best = None
        for point, place in waiting.items():
            for node, (at, path) in enumerate(zip(nodes, paths, strict=True)):
                wire = float(np.linalg.norm(place - np.array(at)))
                cost = wire + balance * (path + wire)
                if best is None or cost < best[0]:
                    best = (cost, point, node, path + wire)
        _, point, node, path = best
        nodes.append(tuple(waiting.pop(point)))
        paths.append(path)
        order.append(point)
        parent.append(node)
    return np.array(order), np.array(parent)
