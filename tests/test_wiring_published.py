"""Published recordings put into a fit together: met within their own intervals.

Values from: Song et al. 2005 (PLoS Biol 3:e68), rat visual cortex, layer 5 pyramids,
931 of 8050 directed pairs, 218 of 4025 pairs both ways; Feldmeyer et al. 1999 (J Physiol
521:169), rat layer 4 spiny cells, 3.4 +- 1.0 contacts, n = 11; Avermann et al. 2012 (J
Neurophysiol 107:3116), mouse layer 2/3, 16/95, 23/40 and 21/35; Nicoll & Blakemore 1993
(Neuroreport 4:167), rat visual layer 5, 4 of 270 within 150 um. The histograms of
appositions are invented: none of the papers gives them.
"""

from __future__ import annotations

import numpy as np
import pytest
from statsmodels.stats.proportion import proportion_confint

from circuitgen.spec import Recording
from circuitgen.wiring import Window, fit_pathways

# Types: layer 5 pyramid, layer 4 spiny, layer 2/3 excitatory, layer 2/3 fast-spiking.
L5, L4, E23, FS = range(4)
SIGNS, HOMES = (True, True, True, False), (2, 1, 0, 0)
TOUCHING = np.array([300, 260, 190, 120, 70, 35, 15, 7, 3])
DENSE = np.array([80, 120, 170, 190, 160, 120, 80, 50, 30])


def _window(row, pathway, histogram, **measured):
    recording = Recording(pre_type="a", post_type="b", row=row, **measured)
    dyads, pairs_n = {}, 0.0
    if "reciprocal_tested_n" in measured:
        share = histogram / histogram.sum()
        pairs_n = 1000.0
        # Appositions of the two ways are taken to be independent.
        dyads = {pathway: np.outer(share, share) * pairs_n}
    return Window(recording, {pathway: histogram}, dyads, pairs_n)


@pytest.fixture(scope="module")
def fit():
    windows = [
        _window(
            1, (L5, L5), DENSE, source="Song et al. 2005", tested_n=8050,
            connected_n=931, reciprocal_tested_n=4025, reciprocal_connected_n=218,
        ),
        _window(
            2, (L4, L4), TOUCHING, source="Feldmeyer et al. 1999", synapses_mean=3.4,
            synapses_sd=1.0, synapses_pairs_n=11,
        ),
        _window(3, (E23, E23), TOUCHING, source="Avermann", tested_n=95, connected_n=16),
        _window(4, (E23, FS), DENSE, source="Avermann", tested_n=40, connected_n=23),
        _window(5, (FS, E23), DENSE, source="Avermann", tested_n=35, connected_n=21),
    ]  # fmt: skip
    return fit_pathways(SIGNS, HOMES, windows, seed=1)


@pytest.mark.parametrize(
    ("place", "k", "n"), [(0, 931, 8050), (2, 16, 95), (3, 23, 40), (4, 21, 35)]
)
def test_probabilities_lie_within_their_intervals(fit, place, k, n):
    low, high = proportion_confint(k, n, 0.05, method="wilson")
    assert low < fit.rows[place].fitted.probability[0] < high


def test_song_reciprocity_is_about_four_times_chance(fit):
    """Two-way pairs: 218/4025 = 0.0542 against 0.1157^2 = 0.0134, four times chance."""
    p = fit.rows[0].fitted.probability[0]
    assert p == pytest.approx(0.1157, abs=4 * np.sqrt(0.1157 * 0.8843 / 8050))
    [row] = fit.reciprocity.rows
    low, high = proportion_confint(218, 4025, 0.05, method="wilson")
    assert low < row.fitted < high
    assert row.fitted / p**2 == pytest.approx(4.05, rel=0.2)
    assert fit.reciprocity.log_ratio[L5, L5] > 1.0


def test_feldmeyer_contacts_lie_within_two_standard_errors(fit):
    shown = fit.rows[1].fitted
    assert shown.mean[0] == pytest.approx(3.4, abs=2 * 1.0 / np.sqrt(11))
    # The standard error of a standard deviation from 11 values: sd / sqrt(2 (n - 1)).
    assert shown.sd[0] == pytest.approx(1.0, abs=2 / np.sqrt(20))


def test_papers_that_disagree_are_named():
    """Song's 0.116 and Nicoll & Blakemore's 4/270 cannot both hold of one pathway.

    With the same pairs in both windows the smaller sample gives way, and its row's
    z says so; the two-sided binomial p of 4/270 at 0.1157 is below 1e-7.
    """
    windows = [
        _window(1, (L5, L5), TOUCHING, tested_n=8050, connected_n=931),
        _window(2, (L5, L5), TOUCHING, tested_n=270, connected_n=4),
    ]
    rows = fit_pathways(SIGNS, HOMES, windows, seed=1).rows
    low, high = proportion_confint(4, 270, 0.05, method="wilson")
    assert not low < rows[1].fitted.probability[0] < high
    low, high = proportion_confint(931, 8050, 0.05, method="wilson")
    assert low < rows[0].fitted.probability[0] < high
