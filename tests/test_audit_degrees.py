"""Spread of degrees: an F test, nominal on normal degrees, blind to their mean."""

from __future__ import annotations

import numpy as np
import pytest
from builders_audit import circuit_of
from scipy.stats import f

from circuitgen.audit import audit, read_degrees
from circuitgen.audit.degrees import DegreeSpread, compare_spread
from circuitgen.core.errors import InputError


def _tissue(random, n, spread):
    """Cells that send more or less than others."""
    out = random.lognormal(0.0, spread, n) if spread else np.ones(n)
    chance = np.clip(0.15 * out / out.mean(), 0, 0.9)
    return circuit_of(random.random((n, n)) < chance[:, None])


def _measured(variation, n=40, direction="out"):
    return DegreeSpread(1, "", "a", direction, variation, n)


def test_the_statistic_is_the_ratio_of_squared_variations():
    circuit = _tissue(np.random.default_rng(1), 150, 0.4)
    degree = np.bincount(circuit.pre, minlength=150)
    variation = degree.std(ddof=1) / degree.mean()
    found = compare_spread(circuit, _measured(0.6))
    ratio = (0.6 / variation) ** 2
    assert found.variation == pytest.approx(variation)
    assert found.p_value == pytest.approx(
        2 * min(f.cdf(ratio, 39, 149), f.sf(ratio, 39, 149))
    )


def test_false_alarms_are_nominal_where_every_pair_connects_alike():
    """1,000 samples of 40 cells of such tissue: four binomial standard deviations."""
    random, alarms = np.random.default_rng(3), 0
    circuit = _tissue(random, 300, 0.0)
    for _ in range(1000):
        degree = random.binomial(299, 0.15, 40)
        measured = _measured(degree.std(ddof=1) / degree.mean())
        alarms += compare_spread(circuit, measured).p_value < 0.05
    # The circuit's own spread is one draw: its error of 4 % moves the rate a little.
    assert abs(alarms / 1000 - 0.05) < 4 * np.sqrt(0.05 * 0.95 / 1000) + 0.02


def test_hubs_are_missed_in_a_circuit_without_them():
    random = np.random.default_rng(3)
    plain, hubs = _tissue(random, 300, 0.0), _tissue(random, 300, 0.8)
    degree = np.bincount(hubs.pre, minlength=300)
    measured = _measured(degree.std(ddof=1) / degree.mean())
    [judged] = audit(plain, [], None, (), [measured])
    assert judged.verdict == "too low"
    assert judged.note.startswith("by chance")
    assert judged.circuit == pytest.approx(float(judged.note.split()[-1]), rel=0.15)
    [judged] = audit(hubs, [], None, (), [measured])
    assert judged.verdict == "agrees"
    # In-degrees of the same circuit hardly vary.
    [judged] = audit(hubs, [], None, (), [_measured(measured.variation, 40, "in")])
    assert judged.verdict == "too low"


def test_files_of_spreads_are_read_and_checked(tmp_path):
    path = tmp_path / "degrees.csv"
    head = "source,types,direction,coefficient_of_variation,cells_n\n"
    path.write_text(head + "x,a,out,0.4,30\n")
    assert read_degrees(path, ("a",)) == [DegreeSpread(1, "x", "a", "out", 0.4, 30)]
    path.write_text(head + "x,A,outt,-1,2\n")
    with pytest.raises(InputError) as caught:
        read_degrees(path, ("a",))
    for words in (
        "types = 'A'",
        "did you mean 'out'",
        "= '-1' must be",
        "= '2' must be",
    ):
        assert words in str(caught.value)
    path.write_text("types,way\n")
    with pytest.raises(InputError, match="direction column is missing"):
        read_degrees(path, ("a",))
