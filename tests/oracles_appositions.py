"""Slow, readable twins of the apposition kernels: every pair of segments is tried."""

from __future__ import annotations

import itertools

import numpy as np

from circuitgen.appositions.scene import target_bits
from circuitgen.morphology.arbor import Kind


def point_segment(p, a, b):
    """Distance of point p from segment ab, and the fraction of the nearest point."""
    side = b - a
    square = side @ side
    fraction = np.clip((p - a) @ side / square, 0, 1) if square > 0 else 0.0
    return np.linalg.norm(p - a - fraction * side), fraction


def segment_distance(a, b, c, d):
    """Distance of segments ab and cd with the fractions of the closest points."""
    tries = []
    for end, point in ((0.0, a), (1.0, b)):
        distance, t = point_segment(point, c, d)
        tries.append((distance, end, t))
    for end, point in ((0.0, c), (1.0, d)):
        distance, s = point_segment(point, a, b)
        tries.append((distance, s, end))
    matrix = np.array([[(b - a) @ (b - a), -(b - a) @ (d - c)], [0, (d - c) @ (d - c)]])
    matrix[1, 0] = matrix[0, 1]
    if np.linalg.det(matrix) > 1e-12:
        s, t = np.linalg.solve(matrix, [(c - a) @ (b - a), -(c - a) @ (d - c)])
        if 0 <= s <= 1 and 0 <= t <= 1:
            tries.append((np.linalg.norm(a + s * (b - a) - c - t * (d - c)), s, t))
    return min(tries, key=lambda found: found[0])


def _placed(points, azimuth_deg, position):
    angle = np.deg2rad(azimuth_deg)
    turn = np.array(
        [
            [np.cos(angle), -np.sin(angle), 0],
            [np.sin(angle), np.cos(angle), 0],
            [0, 0, 1],
        ]
    )
    return points @ turn.T + position


def _pair_hits(axon_arbor, target_arbor, pre, post, shift, arguments):
    """Every (gap, axon segment, target segment, fractions, place on the axon)."""
    bits = target_bits(target_arbor)
    mask, own = arguments["target_mask"][pre], pre == post
    place = arguments["position_um"]
    turn = arguments["azimuth_deg"]
    ends_a = [
        _placed(part, turn[pre], place[pre] + shift)
        for part in (axon_arbor.start_um, axon_arbor.end_um)
    ]
    ends_t = [
        _placed(part, turn[post], place[post])
        for part in (target_arbor.start_um, target_arbor.end_um)
    ]
    for i, j in itertools.product(
        np.flatnonzero(axon_arbor.kind == Kind.AXON), np.flatnonzero(bits & mask)
    ):
        if own and not (arguments.get("autapses") and bits[j] & 12):
            continue
        distance, s, t = segment_distance(
            ends_a[0][i], ends_a[1][i], ends_t[0][j], ends_t[1][j]
        )
        gap = distance
        for arbor, row, fraction in ((axon_arbor, i, s), (target_arbor, j, t)):
            low, high = arbor.start_radius_um[row], arbor.end_radius_um[row]
            gap -= low + fraction * (high - low)
        if gap <= arguments["max_gap_um"]:
            here = axon_arbor.start_um[i]
            spot = here + s * (axon_arbor.end_um[i] - here)
            yield max(gap, 0.0), int(i), int(j), s, t, spot


def thin(hits, min_spacing_um):
    """Take the closest, drop all within the spacing along the axon side, repeat."""
    kept = []
    for hit in sorted(hits, key=lambda found: found[:3]):
        if all(np.linalg.norm(hit[5] - other[5]) >= min_spacing_um for other in kept):
            kept.append(hit)
    return kept


def brute_force(arbors, arguments, copies=0):
    """Return {(pre, post): kept hits} by trying everything, `copies` images each way."""
    n = len(arguments["arbor_index"])
    found = {}
    steps = range(-copies, copies + 1)
    for pre, post in itertools.product(range(n), range(n)):
        hits = []
        for i, j in itertools.product(steps, steps):
            wrap = arguments["wrap_um"]
            shift = np.array([i * wrap[0], j * wrap[1], 0.0])
            if copies == 0 or wrap[0] > 0 or (i, j) == (0, 0):
                hits += _pair_hits(
                    arbors[arguments["arbor_index"][pre]],
                    arbors[arguments["arbor_index"][post]],
                    pre,
                    post,
                    shift,
                    arguments,
                )
        if hits:
            found[pre, post] = thin(hits, arguments["min_spacing_um"])
    return found
