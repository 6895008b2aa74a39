"""Dyads: the two directions of a pair, drawn together where reciprocals were counted.

Of all joint distributions of the two directions that keep each direction's probability,
the one of least relative entropy to independence for a given share of reciprocal pairs
has one odds ratio exp(t_r) for all pairs of two types (dyad model of Holland &
Leinhardt 1981, J Am Stat Assoc 76:33). The marginals of every pair stay as they are.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize_scalar
from scipy.special import xlog1py, xlogy

from circuitgen.wiring.laws import Laws, connection_table
from circuitgen.wiring.window import Pathway, Window

# Prior sd of t_r, about 0: odds ratios from a twentieth to twenty are no surprise.
LOG_ODDS_SD = 1.5
_LIMIT = 12.0


def both_probability(p, q, log_odds):
    """Return P(both directions) from the marginals and the log odds ratio.

    The smaller root of Plackett's quadratic (Plackett 1965, J Am Stat Assoc 60:516),
    written without its cancellation.
    """
    ratio = np.exp(log_odds)
    middle = 1.0 + (p + q) * (ratio - 1.0)
    root = np.sqrt(np.maximum(middle**2 - 4.0 * ratio * (ratio - 1.0) * p * q, 0.0))
    return 2.0 * ratio * p * q / (middle + root)


@dataclass(frozen=True)
class DyadRow:
    """A recording's reciprocal counts: its window, and the share that laws give."""

    window: Window
    fitted: float
    note: str


@dataclass(frozen=True)
class Reciprocity:
    """Log odds ratio by (type, type), symmetric; 0 where no reciprocals were counted.

    `sd` is the posterior's, 0 where nothing was counted.
    """

    log_odds: np.ndarray
    sd: np.ndarray
    rows: tuple[DyadRow, ...]


def _shares(window: Window, laws: Laws, types_n: int):
    """Return p one way, q the other way and weight of all pairs that touch both ways."""
    parts = []
    for (pre, post), dyads in window.dyads.items():
        a, b = np.nonzero(dyads)
        if a.size:
            there = connection_table(laws, pre * types_n + post, dyads.shape[0] - 1)[0]
            back = connection_table(laws, post * types_n + pre, dyads.shape[1] - 1)[0]
            parts.append((there[a], back[b], dyads[a, b] / window.dyads_n))
    if not parts:
        return np.zeros(0), np.zeros(0), np.zeros(0)
    return tuple(np.concatenate(part) for part in zip(*parts, strict=True))


def reciprocal_share(window: Window, laws: Laws, types_n: int, log_odds) -> float:
    """Return the share of a window's unordered pairs that connect both ways.

    `log_odds` is a number for all, or (types, types).
    """
    p, q, weight = _shares(window, laws, types_n)
    if np.ndim(log_odds):
        parts = [
            np.full(np.count_nonzero(dyads), log_odds[pathway])
            for pathway, dyads in window.dyads.items()
        ]
        log_odds = np.concatenate(parts) if parts else 0.0
    return float(weight @ both_probability(p, q, log_odds))


def _is_counted(window: Window) -> bool:
    recording = window.recording
    return (
        recording.use == "fit"
        and recording.reciprocal_tested_n is not None
        and window.dyads_n > 0
    )


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


def _fit_unit(rows: Sequence[Window], laws: Laws, types_n: int) -> tuple[float, float]:
    """Return the posterior mode of t_r and its sd by the curvature there."""
    shares = [_shares(window, laws, types_n) for window in rows]

    def loss(log_odds: float) -> float:
        total = 0.5 * (log_odds / LOG_ODDS_SD) ** 2
        for window, (p, q, weight) in zip(rows, shares, strict=True):
            k = window.recording.reciprocal_connected_n
            n = window.recording.reciprocal_tested_n
            share = np.clip(weight @ both_probability(p, q, log_odds), 1e-12, 1 - 1e-12)
            total -= xlogy(k, share) + xlog1py(n - k, -share)
        return float(total)

    best = minimize_scalar(
        loss, bounds=(-_LIMIT, _LIMIT), method="bounded", options={"xatol": 1e-9}
    ).x
    step = 1e-3
    curvature = (loss(best + step) - 2 * loss(best) + loss(best - step)) / step**2
    return float(best), float(1.0 / np.sqrt(max(curvature, 1.0 / LOG_ODDS_SD**2)))


def fit_reciprocity(windows: Sequence[Window], laws: Laws, types_n: int) -> Reciprocity:
    """Fit the log odds ratios of all type pairs whose reciprocals were counted.

    Parameters
    ----------
    windows : sequence of Window
        Every recording.
    laws : Laws
        One draw; the marginals that stay.
    types_n : int
        Number of cell types.
    """
    counted = [window for window in windows if _is_counted(window)]
    log_odds, sd = np.zeros((2, types_n, types_n))
    for places, pairs in _units(counted).items():
        mode, error = _fit_unit([counted[p] for p in places], laws, types_n)
        for pre, post in pairs:
            log_odds[pre, post] = log_odds[post, pre] = mode
            sd[pre, post] = sd[post, pre] = error
    rows = []
    for window in windows:
        if window.recording.reciprocal_tested_n is not None and window.dyads_n > 0:
            fitted = reciprocal_share(window, laws, types_n, log_odds)
            rows.append(DyadRow(window, fitted, _reach_note(window, laws, types_n)))
    return Reciprocity(log_odds, sd, tuple(rows))


def _reach_note(window: Window, laws: Laws, types_n: int) -> str:
    """Say so when no odds ratio gives the share that was counted."""
    recording = window.recording
    share = recording.reciprocal_connected_n / recording.reciprocal_tested_n
    p, q, weight = _shares(window, laws, types_n)
    most = float(weight @ np.minimum(p, q))
    if share <= most:
        return ""
    return f"reciprocal share {share:.4g} is out of reach: at most {most:.4g}"


def conditional_probability(p, reverse_p, log_odds, reverse_connected):
    """Return P(connected | what the reverse direction does); arrays broadcast.

    Parameters
    ----------
    p, reverse_p : float
        Marginals of this direction and of the other.
    log_odds : float
        Of the two types.
    reverse_connected : bool
    """
    both = both_probability(p, reverse_p, log_odds)
    with np.errstate(invalid="ignore", divide="ignore"):
        given = np.where(
            reverse_connected, both / reverse_p, (p - both) / (1.0 - reverse_p)
        )
    # Where the other direction is impossible or certain it tells nothing.
    sure = (reverse_p <= 0.0) | (reverse_p >= 1.0)
    return np.clip(np.where(sure, p, given), 0.0, 1.0)
