"""Dyads: the two directions of a pair, drawn together where reciprocals were counted.

Of all joint distributions of the two directions that keep both pathways' connection
probabilities, the one of largest entropy for a given share of reciprocal pairs adds a
weight exp(t_r) for connecting both ways (dyad model of Holland & Leinhardt 1981, J Am
Stat Assoc 76:33). With L = t0 + S_a of one direction and L' of the other:

P(connected) = sigmoid(L + softplus(L' + t_r) - softplus(L')),
P(connected | the other direction is or is not) = sigmoid(L + t_r) or sigmoid(L).

t0 of both pathways is shifted so that their probabilities stay what they were.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize_scalar
from scipy.special import expit, xlog1py, xlogy

from circuitgen.wiring.law import softplus
from circuitgen.wiring.laws import Laws
from circuitgen.wiring.observation import ways_and_moments
from circuitgen.wiring.window import Pathway, Window

# Prior sd of t_r, about 0: odds ratios from a twentieth to twenty are no surprise.
LOG_ODDS_SD = 1.5
_LIMIT = 20.0
_MOST_STEPS = 200
_CLOSE = 1e-12


def margin(odds, other_odds, log_ratio):
    """Return P(connected) of one direction from the log odds L of both and t_r."""
    return expit(odds + _lift(other_odds, log_ratio))


def _lift(other_odds, log_ratio):
    """Return softplus(L' + t_r) - softplus(L'); 0 where the other way never connects."""
    with np.errstate(invalid="ignore"):
        lift = softplus(other_odds + log_ratio) - softplus(other_odds)
    return np.where(np.isneginf(other_odds), 0.0, lift)


def both_probability(odds, other_odds, log_ratio):
    """Return P(connected both ways) from the log odds L of both ways and t_r."""
    return margin(odds, other_odds, log_ratio) * expit(other_odds + log_ratio)


@dataclass(frozen=True)
class DyadRow:
    """A recording's reciprocal counts: its window, and the share that laws give."""

    window: Window
    fitted: float
    note: str


@dataclass(frozen=True)
class Reciprocity:
    """Coupling of the two directions of pairs.

    Attributes
    ----------
    log_ratio : (types, types)
        t_r, symmetric; 0 where no reciprocals were counted.
    sd : (types, types)
        Of its posterior, 0 where nothing was counted.
    shift : (pathways,)
        What is added to t0 of coupled pathways to keep their probability.
    rows : tuple of DyadRow
    """

    log_ratio: np.ndarray
    sd: np.ndarray
    shift: np.ndarray
    rows: tuple[DyadRow, ...]


class _Pairs:
    """Unordered pairs of two types: log odds both ways, and how many there are.

    Within one type both directions follow one law, and one shift keeps it.
    """

    def __init__(self, laws: Laws, types_n: int, pathway: Pathway, dyads: np.ndarray):
        pre, post = pathway
        a, b = np.nonzero(dyads)
        some = a + b > 0
        a, b = a[some], b[some]
        self.weight = dyads[a, b].astype(float)
        self.odds = _log_odds(laws, pre * types_n + post, a)
        self.other = _log_odds(laws, post * types_n + pre, b)
        self.alike = pre == post
        self.ends = (pre * types_n + post, post * types_n + pre)
        self.targets = (
            float(self.weight @ expit(self.odds)),
            float(self.weight @ expit(self.other)),
        )

    def shifts(self, log_ratio: float) -> tuple[float, float]:
        """Return what to add to t0 of both directions: Newton, one after the other."""
        here = there = 0.0
        for _ in range(_MOST_STEPS):
            before = here, there
            here += self._step(self.odds + here, self.other + there, log_ratio, 0)
            if self.alike:
                there = here
            else:
                there += self._step(self.other + there, self.odds + here, log_ratio, 1)
            if max(abs(here - before[0]), abs(there - before[1])) < _CLOSE:
                break
        return here, there

    def _step(self, odds, other, log_ratio, way: int) -> float:
        p = margin(odds, other, log_ratio)
        now, slope = float(self.weight @ p), float(self.weight @ (p * (1 - p)))
        target = self.targets[way]
        if self.alike:
            q = margin(other, odds, log_ratio)
            now = (now + float(self.weight @ q)) / 2
            slope = (slope + float(self.weight @ (q * (1 - q)))) / 2
            target = sum(self.targets) / 2
        if target <= 0.0 or now <= 0.0 or slope <= 0.0:
            return 0.0
        # In logarithms the sum bends little.
        return float(np.clip((np.log(target) - np.log(now)) * now / slope, -2.0, 2.0))

    def both(self, log_ratio: float) -> float:
        """Return the expected number of pairs that connect both ways."""
        here, there = self.shifts(log_ratio)
        chance = both_probability(self.odds + here, self.other + there, log_ratio)
        return float(self.weight @ chance)


def _log_odds(laws: Laws, pathway: int, a: np.ndarray) -> np.ndarray:
    """Return t0 + S_a of one pathway; -inf where there is no apposition."""
    law = laws.law(pathway)
    ways, _ = ways_and_moments(a, np.full(a.size, law.t1), np.full(a.size, law.t2))
    return law.t0 + ways


def _units(windows: Sequence[Window]) -> dict[tuple[int, ...], list[Pathway]]:
    """Sort type pairs by the rows that decide them: rows of few types before groups."""
    deciding: dict[Pathway, list[int]] = {}
    for place, window in enumerate(windows):
        for pre, post in window.dyads:
            deciding.setdefault((min(pre, post), max(pre, post)), []).append(place)
    units: dict[tuple[int, ...], list[Pathway]] = {}
    for pair, places in deciding.items():
        fewest = min(len(windows[place].dyads) for place in places)
        key = tuple(p for p in places if len(windows[p].dyads) == fewest)
        units.setdefault(key, []).append(pair)
    return units


def _pairs_of(window: Window, laws: Laws, types_n: int) -> list[_Pairs]:
    return [
        _Pairs(laws, types_n, pathway, dyads)
        for pathway, dyads in window.dyads.items()
        if dyads.sum() > dyads[0, 0]
    ]


def _share(pairs: list[_Pairs], total: float, log_ratio: float) -> float:
    return sum(part.both(log_ratio) for part in pairs) / total


def _fit_unit(rows: Sequence[Window], laws: Laws, types_n: int) -> tuple[float, float]:
    """Return the posterior mode of t_r and its sd by the curvature there."""
    parts = [_pairs_of(window, laws, types_n) for window in rows]

    def loss(log_ratio: float) -> float:
        total = 0.5 * (log_ratio / LOG_ODDS_SD) ** 2
        for window, pairs in zip(rows, parts, strict=True):
            k = window.recording.reciprocal_connected_n
            n = window.recording.reciprocal_tested_n
            share = _share(pairs, window.dyads_n, log_ratio)
            share = np.clip(share, 1e-12, 1 - 1e-12)
            total -= xlogy(k, share) + xlog1py(n - k, -share)
        return float(total)

    best = minimize_scalar(
        loss, bounds=(-_LIMIT, _LIMIT), method="bounded", options={"xatol": 1e-7}
    ).x
    step = 1e-2
    curvature = (loss(best + step) - 2 * loss(best) + loss(best - step)) / step**2
    return float(best), float(1.0 / np.sqrt(max(curvature, 1.0 / LOG_ODDS_SD**2)))


def fit_reciprocity(windows: Sequence[Window], laws: Laws, types_n: int) -> Reciprocity:
    """Fit the coupling of all type pairs whose reciprocals were counted.

    Parameters
    ----------
    windows : sequence of Window
        Every recording.
    laws : Laws
        One draw; its probabilities stay.
    types_n : int
        Number of cell types.
    """
    counted = [w for w in windows if w.recording.use == "fit" and w.dyads_n > 0]
    log_ratio, sd = np.zeros((2, types_n, types_n))
    shift = np.zeros(types_n**2)
    for places, type_pairs in _units(counted).items():
        rows = [counted[place] for place in places]
        mode, error = _fit_unit(rows, laws, types_n)
        for pre, post in type_pairs:
            log_ratio[pre, post] = log_ratio[post, pre] = mode
            sd[pre, post] = sd[post, pre] = error
        for pairs in _pairs_of(rows[0], laws, types_n):
            if tuple(sorted(divmod(pairs.ends[0], types_n))) in type_pairs:
                shift[list(pairs.ends)] = pairs.shifts(mode)
    found = Reciprocity(log_ratio, sd, shift, ())
    dyad_rows = [
        _row(window, laws, types_n, found) for window in windows if window.dyads_n > 0
    ]
    return Reciprocity(log_ratio, sd, shift, tuple(dyad_rows))


def _row(window: Window, laws: Laws, types_n: int, found: Reciprocity) -> DyadRow:
    """Say what the coupled laws show of a row's reciprocals, and what they could."""
    total = most = 0.0
    for pairs in _pairs_of(window, laws, types_n):
        ratio = found.log_ratio[divmod(pairs.ends[0], types_n)]
        here, there = found.shift[list(pairs.ends)]
        chance = both_probability(pairs.odds + here, pairs.other + there, ratio)
        total += float(pairs.weight @ chance)
        most += pairs.both(_LIMIT)
    recording = window.recording
    share = recording.reciprocal_connected_n / recording.reciprocal_tested_n
    note = ""
    if share > most / window.dyads_n:
        note = f"reciprocal share {share:.4g} is out of reach:"
        note += f" at most {most / window.dyads_n:.4g}"
    return DyadRow(window, total / window.dyads_n, note)
