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
        self._rule = rule
        k = np.array([w.recording.connected_n for w in windows])
        n = np.array([w.recording.tested_n for w in windows])
        p = np.array([_probabilities(w, rule) for w in windows])
        likelihood = binom.pmf(k[:, None], n[:, None], p)
        # (recordings, spreads, means): likelihood under every normal on the grid.
        shape = (len(windows), _SPREADS.size, _MEANS.size)
        flat = _normals().reshape(-1, _ODDS.size)
        with np.errstate(divide="ignore"):
            logs = np.log((likelihood @ flat.T).reshape(shape))
        self._logs = np.maximum(logs, -1e6)
        self._classes = np.array([self._class(sign) for sign in classes])

    def _class(self, sign) -> str:
        return str(sign) if self._rule == RULES[1] else ""

    def predict(self, left_out: Sequence[int], window: Window, sign) -> np.ndarray:
        """Return P(k) for k = 0 .. n of a recording from all rows not left out.

        `sign` is its class, as those of the rows were given.
        """
        others = np.setdiff1d(np.arange(self._classes.size), left_out)
        best = np.zeros(_SPREADS.size)
        for name in np.unique(self._classes[others]):
            mine = others[self._classes[others] == name]
            best += self._logs[mine].sum(axis=0).max(axis=1)
        shares = np.full(_ODDS.size, 1 / _ODDS.size)
        if others.size:
            like = others[self._classes[others] == self._class(sign)]
            like = like if like.size else others
            spread = int(best.argmax())
            mean = int(self._logs[like, spread].sum(axis=0).argmax())
            shares = _normals()[spread, mean]
        n = window.recording.tested_n
        counts = np.arange(n + 1)
        return binom.pmf(counts[:, None], n, _probabilities(window, self._rule)) @ shares
