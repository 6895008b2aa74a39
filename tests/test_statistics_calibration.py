"""A short run of the calibration of intervals; the whole is in tests/statistics."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent / "statistics"))
from calibration import score_world, summarise


@pytest.fixture(scope="module")
def found():
    return summarise([score_world((seed, "well specified", 4)) for seed in range(3)])


def test_intervals_cover_about_as_often_as_they_say(found):
    """Three worlds: their means vary by 0.03 and 0.05, of which three are allowed."""
    assert 0.90 - 0.09 < found["coverage_90"] < 0.90 + 0.09
    assert 0.50 - 0.15 < found["coverage_50"] < 0.50 + 0.15


def test_they_tell_more_than_the_best_plain_rule(found):
    assert found["gain"] > 0.0
    assert found["error_of_p"] < 0.12
    assert np.isfinite(list(found["log_score_plain"].values())).all()
