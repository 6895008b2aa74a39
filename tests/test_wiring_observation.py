"""What recordings would show: compiled sums against plain enumeration."""

from __future__ import annotations

import numpy as np
import pytest
from oracles_wiring_observation import rows_shown, size_shares

from circuitgen.wiring.observation import make_entries, observe, ways_and_moments

ROWS, UNITS = 4, 5
ETA = np.array([-0.7, 0.4, -2.0, 1.5, -0.1])
TAU = np.array([-1.0, -0.2, 0.6, -2.0, -1.4])
BEND = np.array([0.0, 0.1, -0.25, 0.0, 0.03])
MIDDLE = np.array([2.0, 3.0, 2.5, 2.0, 4.0])


@pytest.fixture(scope="module")
def entries():
    random = np.random.default_rng(4)
    n = 80
    a = random.integers(1, 15, n)
    lost = np.where(random.random(n) < 0.5, (a * random.random(n)).astype(int), 0)
    lost[:3] = a[:3]  # nothing of these is kept
    row, unit = random.integers(0, ROWS, n), random.integers(0, UNITS, n)
    return make_entries(row, unit, a, lost, random.random(n), ROWS, UNITS)


@pytest.mark.parametrize("t1", [-30.0, -3.0, 0.0, 2.0, 25.0])
@pytest.mark.parametrize("t2", [0.0, -0.4, 0.2])
def test_sums_equal_enumeration(t1, t2):
    a = np.array([0, 1, 2, 7, 40, 90])
    ways, raw = ways_and_moments(a, np.full(a.size, t1), np.full(a.size, t2))
    assert ways[0] == -np.inf
    assert (raw[:, 0] == 0).all()
    for i in range(1, a.size):
        shares, expected = size_shares(int(a[i]), t1, t2)
        assert ways[i] == pytest.approx(expected, rel=1e-12, abs=1e-12)
        s = np.arange(1, a[i] + 1, dtype=float)
        for power in range(4):
            moment = float(np.array(shares) @ s ** (power + 1))
            assert raw[power, i] == pytest.approx(moment, rel=1e-11)


def test_rows_equal_enumeration(entries):
    found = observe(entries, ETA, TAU, BEND, MIDDLE)
    expected = rows_shown(entries, ETA, TAU, BEND, MIDDLE)
    for values, wanted in zip(
        (found.p, found.first, found.second), expected, strict=True
    ):
        assert values == pytest.approx(wanted, rel=1e-11)


def test_slopes_are_those_of_differences(entries):
    """Central differences: error of the order of step^2 and of rounding / step."""
    found, step = observe(entries, ETA, TAU, BEND, MIDDLE), 1e-5
    place = np.concatenate([ETA, TAU, BEND])
    for j in range(place.size):
        kind, unit = divmod(j, UNITS)
        ends = []
        for sign in (1, -1):
            moved = place.copy()
            moved[j] += sign * step
            ends.append(observe(entries, *np.split(moved, 3), MIDDLE))
        mine = entries.pair_unit == unit
        for name in ("p", "first", "second"):
            change = (getattr(ends[0], name) - getattr(ends[1], name)) / (2 * step)
            slope = np.zeros(ROWS)
            slope[entries.pair_row[mine]] = getattr(found, f"{name}_slope")[mine, kind]
            assert slope == pytest.approx(change, abs=1e-8 * (1 + np.abs(change).max()))
