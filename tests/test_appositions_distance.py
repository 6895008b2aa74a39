"""Distances of segments against an independent library and against calculus."""

from __future__ import annotations

import numpy as np
import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st
from oracles_appositions import segment_distance
from scipy.optimize import minimize

from circuitgen.appositions.distance_kernels import segment_distances


def distances(a, b, c, d):
    return segment_distances(*(np.ascontiguousarray(x, float) for x in (a, b, c, d)))


def test_in_the_plane_equal_to_shapely():
    # shapely (GEOS) computes distances of line strings exactly, in two dimensions.
    rng = np.random.default_rng(1)
    ends = rng.uniform(-10, 10, (4, 3000, 3))
    ends[:, :, 2] = 0.0
    ends[:, ::5] = np.round(ends[:, ::5] / 5) * 5  # many parallel, touching, zero length
    lines = [
        shapely.linestrings(np.stack([p[:, :2], q[:, :2]], axis=1))
        for p, q in (ends[:2], ends[2:])
    ]
    expected = shapely.distance(*lines)
    np.testing.assert_allclose(distances(*ends)[:, 0], expected, atol=1e-12)


def test_in_space_equal_to_minimisation():
    # scipy.optimize minimises the distance over both fractions from several starts.
    rng = np.random.default_rng(2)
    for a, b, c, d in rng.normal(0, 5, (40, 4, 3)):

        def gap(x, a=a, b=b, c=c, d=d):
            return ((a + x[0] * (b - a) - c - x[1] * (d - c)) ** 2).sum()

        best = min(
            minimize(gap, start, bounds=[(0, 1)] * 2, tol=1e-14).fun
            for start in ([0, 0], [1, 0], [0, 1], [1, 1], [0.5, 0.5])
        )
        (found,) = distances([a], [b], [c], [d])
        assert found[0] == pytest.approx(np.sqrt(best), abs=1e-6)


DEGENERATE = {
    "parallel": ([0, 0, 0], [4, 0, 0], [1, 3, 0], [9, 3, 0], 3.0),
    "collinear apart": ([0, 0, 0], [4, 0, 0], [6, 0, 0], [9, 0, 0], 2.0),
    "collinear overlapping": ([0, 0, 0], [4, 0, 0], [2, 0, 0], [9, 0, 0], 0.0),
    "touching ends": ([0, 0, 0], [1, 1, 1], [1, 1, 1], [4, -2, 0], 0.0),
    "first a point": ([2, 5, 0], [2, 5, 0], [0, 0, 0], [4, 0, 0], 5.0),
    "second a point": ([0, 0, 0], [4, 0, 0], [7, 4, 0], [7, 4, 0], 5.0),
    "both points": ([0, 0, 0], [0, 0, 0], [1, 2, 2], [1, 2, 2], 3.0),
    "nearly parallel crossing": ([-2, -1e-5, 0], [2, 1e-5, 0], [-2, 0, 0], [2, 0, 0], 0),
}


@pytest.mark.parametrize("name", DEGENERATE)
def test_degenerate_segments(name):
    *ends, expected = DEGENERATE[name]
    (found,) = distances(*([end] for end in ends))
    assert found[0] == pytest.approx(expected, abs=1e-9)


_COORDINATE = st.floats(-50, 50, allow_nan=False, width=32)
_POINT = st.tuples(_COORDINATE, _COORDINATE, _COORDINATE)


@given(_POINT, _POINT, _POINT, _POINT)
def test_equal_to_the_readable_twin(a, b, c, d):
    a, b, c, d = (np.array(x, float) for x in (a, b, c, d))
    (found,) = distances([a], [b], [c], [d])
    expected, _, _ = segment_distance(a, b, c, d)
    assert found[0] == pytest.approx(expected, abs=1e-6)
    s, t = found[1:]
    assert 0 <= s <= 1
    assert 0 <= t <= 1
    place = np.linalg.norm(a + s * (b - a) - c - t * (d - c))
    assert found[0] == pytest.approx(place, abs=1e-6)
