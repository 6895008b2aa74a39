"""The law of largest likelihood for several recordings at once.

Connected pairs are binomial, mean numbers of synapses are normal about the law's. The
search runs over t1 and eta = t0 + S_5(t1), the log-odds of connection of a pair with
five appositions: t0 and t1 themselves are strongly correlated.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from circuitgen.wiring.law import Histogram, Moments, moments, ways

REFERENCE_APPOSITIONS = 5
# Farther out nothing changes that a recording could tell.
_BOUNDS = np.array([300.0, 60.0])
_LONGEST_STEP = 4.0
# A step that gains less log-likelihood than this is the last.
_LEAST_GAIN = 1e-20
_MOST_STEPS = 200
_MOST_SPREAD = 2.0


@dataclass(frozen=True)
class Datum:
    """One recording, as the likelihood sees it.

    Attributes
    ----------
    histogram : Histogram
        Pairs that the recording could have drawn, some of which touch.
    tested_n, connected_n : float
        Pairs; 0 tested where no probability was recorded.
    synapses_mean, mean_error : float
        Mean of the connections and its standard error; NaN where not recorded.
    synapses_sd : float
        NaN where not recorded.
    """

    histogram: Histogram
    tested_n: float
    connected_n: float
    synapses_mean: float = np.nan
    mean_error: float = np.nan
    synapses_sd: float = np.nan

    @property
    def has_mean(self) -> bool:
        """Whether a mean number of synapses was recorded."""
        return bool(np.isfinite(self.synapses_mean))


def reference_odds(t1: float, t2: float = 0.0) -> tuple[float, float]:
    """Return S_a at the reference number of appositions, and its slope with t1."""
    found = ways(REFERENCE_APPOSITIONS, t1, t2)
    return float(found.log_sum), float(found.mean)


def _log_likelihood(datum: Datum, now: Moments) -> float:
    p = now.probability
    free_n = datum.tested_n - datum.connected_n
    value = special.xlogy(datum.connected_n, p) + special.xlog1py(free_n, -p)
    if datum.has_mean:
        value -= (
            0.5 * ((now.synapses_mean - datum.synapses_mean) / datum.mean_error) ** 2
        )
    return float(value)


def _score(datum: Datum, now: Moments) -> tuple[np.ndarray, np.ndarray]:
    """Return the log-likelihood's slope and expected curvature in t0 and t1."""
    p = now.probability
    weight = 1.0 / max(p * (1 - p), 1e-300)
    slope = weight * (datum.connected_n - datum.tested_n * p) * now.probability_slope
    change = now.probability_slope
    curvature = datum.tested_n * weight * np.outer(change, change)
    if datum.has_mean:
        precision = datum.mean_error**-2.0
        missing = datum.synapses_mean - now.synapses_mean
        slope = slope + precision * missing * now.mean_slope
        curvature = curvature + precision * np.outer(now.mean_slope, now.mean_slope)
    return slope, curvature


def _total(data, place, t2, *, with_score: bool):
    """Return the log-likelihood at (eta, t1), with its slope and curvature there."""
    level, level_slope = reference_odds(place[1], t2)
    law = (place[0] - level, place[1], t2)
    found = [moments(datum.histogram, *law) for datum in data]
    value = sum(map(_log_likelihood, data, found))
    if not with_score:
        return value
    scores = list(map(_score, data, found))
    # t0 moves by -level_slope when t1 moves at fixed eta.
    turn = np.array([[1.0, 0.0], [-level_slope, 1.0]])
    slope = turn @ sum(score[0] for score in scores)
    return value, slope, turn @ sum(score[1] for score in scores) @ turn.T


def fit_jointly(
    data: Sequence[Datum], *, eta=None, t1=None, t2: float = 0.0
) -> tuple[float, float]:
    """Return the t0 and t1 of largest likelihood at a given t2.

    Parameters
    ----------
    data : sequence of Datum
        At least one, with at least one connected pair unless `eta` is given.
    eta, t1 : float, optional
        Held where given: the recordings may say nothing about them.
    t2 : float
        The spread parameter.
    """
    free = np.array([eta is None, t1 is None])
    place = np.array([-1.0 if eta is None else eta, -1.0 if t1 is None else t1])
    for _ in range(_MOST_STEPS):
        value, slope, curvature = _total(data, place, t2, with_score=True)
        # At a bound only the way back is open.
        open_way = free & ~((np.abs(place) >= _BOUNDS) & (slope * place > 0))
        step = _scoring_step(slope, curvature, open_way)
        # At the top the likelihood is flat: steps there pass on their slope alone.
        least = value - 1e-12 * max(abs(value), 1.0)
        size, new = 1.0, _moved(place, step)
        while _total(data, new, t2, with_score=False) < least and size > 1e-6:
            size /= 2
            new = _moved(place, size * step)
        place = new
        if slope @ step < _LEAST_GAIN or size < 1e-6:
            break
    return float(place[0] - reference_odds(place[1], t2)[0]), float(place[1])


def _moved(place, step) -> np.ndarray:
    return np.clip(place + step, -_BOUNDS, _BOUNDS)


def _scoring_step(slope, curvature, free) -> np.ndarray:
    """Return Fisher's step for what is free, not longer than the longest allowed."""
    step = np.zeros(2)
    here = curvature[np.ix_(free, free)]
    # A trace of the diagonal keeps directions that the data leave open from running off.
    ridge = 1e-12 * np.trace(here) + 1e-300
    step[free] = np.linalg.solve(here + ridge * np.eye(here.shape[0]), slope[free])
    return step / max(1.0, np.abs(step).max() / _LONGEST_STEP)


def fit_with_spread(data: Sequence[Datum], *, eta=None) -> tuple[float, float, float]:
    """Return the law of largest likelihood whose spread is the recorded one.

    The recorded variances are met on average; t2 stays at an end of its range (2 on
    either side) where they cannot be.
    """
    spread = [datum for datum in data if np.isfinite(datum.synapses_sd)]

    def excess(t2):
        law = (*fit_jointly(data, eta=eta, t2=t2), t2)
        found = [moments(datum.histogram, *law).synapses_sd for datum in spread]
        recorded = [datum.synapses_sd for datum in spread]
        return float(np.mean(np.square(found)) - np.mean(np.square(recorded)))

    near, far = 0.0, -np.copysign(1e-3, excess(0.0))
    while excess(far) * far < 0 and abs(far) < _MOST_SPREAD:
        near, far = far, 2 * far
    t2 = optimize.brentq(excess, near, far) if excess(far) * far > 0 else far
    return (*fit_jointly(data, eta=eta, t2=t2), t2)
