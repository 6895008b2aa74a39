"""The slow readable walk from a site to its soma, inside a slice or not."""

from __future__ import annotations

import dataclasses

import numpy as np


def stays_inside(arbor, azimuth_deg, segment, fraction, across, depth_um, thickness_um):
    """Tell whether the path from a place on an arbor to its soma stays in the slice.

    `depth_um` is the soma's depth below the first face, `across` the unit vector from
    that face to the other.
    """
    angle = np.deg2rad(azimuth_deg)
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])

    def is_inside(point):
        depth = depth_um + float(across @ (turn @ point[:2]))
        return 0.0 <= depth <= thickness_um

    start, end = arbor.start_um[segment], arbor.end_um[segment]
    if not is_inside(start + fraction * (end - start)):
        return False
    while segment >= 0:
        if not is_inside(arbor.start_um[segment]):
            return False
        segment = arbor.parent[segment]
    return True


def cut_arbor(arbor, azimuth_deg, across, depth_um, thickness_um):
    """Return what two cuts leave of an arbor: pieces still joined to the soma.

    A piece that crosses a plane ends there. Arguments as for `stays_inside`.
    """
    angle = np.deg2rad(azimuth_deg)
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    normal = across @ turn

    def depth(points):
        return depth_um + points[:, :2] @ normal

    begin, finish = depth(arbor.start_um), depth(arbor.end_um)
    inside = (begin >= 0) & (begin <= thickness_um)
    share = np.ones(begin.size)
    for plane in (0.0, thickness_um):
        crosses = inside & ((finish - plane) * (begin - plane) < 0)
        at = (plane - begin[crosses]) / (finish[crosses] - begin[crosses])
        share[crosses] = np.minimum(share[crosses], at)
    joined = np.zeros(begin.size, bool)
    for segment in range(begin.size):
        parent, chain = arbor.parent[segment], inside[segment]
        while chain and parent >= 0:
            chain = inside[parent] and share[parent] == 1.0
            parent = arbor.parent[parent]
        joined[segment] = chain
    keep = np.flatnonzero(joined)
    place = np.full(begin.size + 1, -1)
    place[keep] = np.arange(keep.size)
    fields = {
        field.name: getattr(arbor, field.name)
        for field in dataclasses.fields(arbor)
        if field.name != "name" and not field.name.startswith("piece_")
    }
    fields = {name: values[keep].copy() for name, values in fields.items()}
    way = fields["end_um"] - fields["start_um"]
    fields["end_um"] = fields["start_um"] + share[keep, None] * way
    fields["parent"] = place[arbor.parent[keep]].astype(np.int32)
    pieces = {
        name: getattr(arbor, name)
        for name in ("piece_number", "piece_backward", "piece_bounds_um")
    }
    return dataclasses.replace(arbor, **fields, **pieces)
