"""Three plain rules to compare predictions with, each with an honest spread.

One probability for all; one by the signs of the two types; one survival factor for
every apposition. In each the log odds of what is shared vary normally between
pathways, mean and spread being those of largest likelihood over the other recordings.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

import numpy as np
from scipy.special import expit
from scipy.stats import binom, norm

from circuitgen.wiring import Window, entries_of

RULES = (
    "one probability for all",
    "one probability by signs",
    "one survival factor per apposition",
)
_ODDS = np.linspace(-9.0, 9.0, 145)
_MEANS = _ODDS[::2]
_SPREADS = np.geomspace(0.05, 3.0, 24)


def _probabilities(window: Window, rule: str) -> np.ndarray:
    """Return a row's probability on the grid of log odds."""
    if rule != RULES[2]:
        return expit(_ODDS)
    total, out = window.pairs_n, np.zeros(_ODDS.size)
    for histogram in window.histograms.values():
        a, lost, weight = entries_of(histogram)
        none = np.exp((a - lost) * np.log(expit(-_ODDS))[:, None])
        out += (1.0 - none) @ (weight / total)
    return out


@cache
def _normals() -> np.ndarray:
    """Shares of the grid's log odds under every normal, (spreads, means, odds)."""
    out = norm.pdf(_ODDS, _MEANS[None, :, None], _SPREADS[:, None, None])
    return out / out.sum(axis=2, keepdims=True)


class PlainRule:
    """One rule over some recordings: their likelihoods on a grid of log odds."""

    def __init__(self, rule: str, windows: Sequence[Window], classes: Sequence):
        k = np.array([w.recording.connected_n for w in windows])
        self._n = np.array([w.recording.tested_n for w in windows])
        self._p = np.array([_probabilities(w, rule) for w in windows])
        likelihood = binom.pmf(k[:, None], self._n[:, None], self._p)
        # (recordings, spreads, means): likelihood under every normal on the grid.
        self._normals = _normals()
        with np.errstate(divide="ignore"):
            self._logs = np.log(np.einsum("rx,smx->rsm", likelihood, self._normals))
        self._logs = np.maximum(self._logs, -1e6)
        signs = classes if rule == RULES[1] else [0] * len(windows)
        self._classes = np.array([str(sign) for sign in signs])

    def predict(self, left_out: Sequence[int], row: int) -> np.ndarray:
        """Return P(k) for k = 0 .. n of one row from all rows not left out."""
        others = np.setdiff1d(np.arange(len(self._n)), left_out)
        best = np.zeros(_SPREADS.size)
        for name in np.unique(self._classes[others]):
            mine = others[self._classes[others] == name]
            best += self._logs[mine].sum(axis=0).max(axis=1)
        spread = int(best.argmax()) if others.size else _SPREADS.size - 1
        like = others[self._classes[others] == self._classes[row]]
        like = like if like.size else others
        mean = int(self._logs[like, spread].sum(axis=0).argmax()) if like.size else 0
        shares = (
            self._normals[spread, mean]
            if others.size
            else np.full(_ODDS.size, 1 / _ODDS.size)
        )
        counts = np.arange(self._n[row] + 1)
        return binom.pmf(counts[:, None], self._n[row], self._p[row]) @ shares
