"""Posterior of all pathways at given spreads: Newton for the mode, Laplace about it.

Everything is solved in the space of the observations (a few for each recording): the
covariance K of the pathways is applied, never inverted. With A = J K J' + R the mode is
mean + K J' A^-1 (y - g + J (f - mean)) at the fixed point.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cho_solve, solve
from scipy.sparse import csr_array

from circuitgen.wiring.evidence import Evidence, Reading, Target
from circuitgen.wiring.prior import BEND_SD, Design, make_priors

_MOST_STEPS = 100
# A step that gains less log posterior than this is the last; the law of a pathway that
# is known to any precision moves it far more.
_LEAST_GAIN = 1e-3
_LEAST_SHARE = 1e-3
# A draw need not be settled to the last digit: its own spread is of order 1.
_MOST_SETTLING = 12
_LEAST_LOSS = 5e-2


class Space:
    """The units of the evidence within all pathways, at given spreads.

    The units' covariance is K = F F' + D, with few columns in F and D diagonal.
    """

    def __init__(self, design: Design, evidence: Evidence, spreads: np.ndarray):
        self.priors = make_priors(design, spreads)
        self.units, size = evidence.pathways, evidence.pathways.size
        self.bends = np.where(evidence.bent, BEND_SD**2, 0.0)
        own = [prior.mean[self.units] for prior in self.priors]
        self.mean = np.concatenate([*own, np.zeros(size)])
        columns = self.priors[0].features.shape[1]
        self._features = np.zeros((3 * size, 2 * columns))
        for kind, prior in enumerate(self.priors):
            rows = slice(kind * size, (kind + 1) * size)
            of_kind = slice(kind * columns, (kind + 1) * columns)
            self._features[rows, of_kind] = prior.features[self.units]
        own = [np.full(size, prior.own**2) for prior in self.priors]
        self._own = np.concatenate([*own, self.bends])

    def spread_all(self, weights: np.ndarray) -> list[np.ndarray]:
        """Return K @ weights: eta and tau of all pathways, t2 of the units."""
        parts = np.split(weights, 3)
        return [
            self.priors[0].spread(self.units, parts[0]),
            self.priors[1].spread(self.units, parts[1]),
            self.bends[:, None] * parts[2],
        ]

    def spread(self, weights: np.ndarray) -> np.ndarray:
        """Return the units' K @ weights, (3 x units,) or (3 x units, m)."""
        own = self._own if weights.ndim == 1 else self._own[:, None]
        return self._features @ (self._features.T @ weights) + own * weights

    def system(self, slope: csr_array, noise: np.ndarray) -> np.ndarray:
        """Return A = J K J' + R, (observations, observations)."""
        common = slope @ self._features
        out = common @ common.T + (slope.multiply(self._own) @ slope.T).toarray()
        out[np.diag_indices_from(out)] += noise
        return out


@dataclass(frozen=True)
class Mode:
    """Mode at one set of spreads, and what is needed to draw about it.

    `log_evidence` is Laplace's. `slope` J, `noise` R and `missing` y - g are at the
    mode, `place` (3 x units,); `target` holds the evidence as normal targets.
    """

    space: Space
    weights: np.ndarray
    place: np.ndarray
    eta: np.ndarray
    tau: np.ndarray
    bend: np.ndarray
    log_evidence: float
    slope: csr_array
    noise: np.ndarray
    missing: np.ndarray
    target: Target


def _factor(space: Space, reading: Reading) -> np.ndarray:
    """Cholesky factor of J K J' + R."""
    system = space.system(reading.slope, reading.noise)
    # A trace of the diagonal: two exact rows of one pathway are nearly the same.
    system[np.diag_indices_from(system)] *= 1 + 1e-13
    return np.linalg.cholesky(system)


def find_mode(
    design: Design, evidence: Evidence, spreads: np.ndarray, start: np.ndarray
) -> Mode:
    """Return the posterior mode of all pathways at given spreads.

    Parameters
    ----------
    design, evidence
        The pathways and what was recorded.
    spreads : (6,)
        Standard deviations of the deviations.
    start : (3 x units,)
        Weights v of a first guess, mean + K v; zeros will do.
    """
    space = Space(design, evidence, spreads)
    weights = start
    place = space.mean + space.spread(weights)
    reading = evidence.read(place)
    value = reading.log_likelihood - 0.5 * weights @ (place - space.mean)
    for _ in range(_MOST_STEPS):
        factor = _factor(space, reading)
        away = reading.missing + reading.slope @ (place - space.mean)
        full = reading.slope.T @ cho_solve((factor, True), away)
        full_place = space.mean + space.spread(full)
        share, before = 1.0, (weights, place, reading, value)
        while True:
            weights = before[0] + share * (full - before[0])
            place = before[1] + share * (full_place - before[1])
            reading = evidence.read(place)
            value = reading.log_likelihood - 0.5 * weights @ (place - space.mean)
            if value >= before[3] or share < _LEAST_SHARE:
                break
            share /= 2
        if value < before[3]:
            weights, place, reading, _ = before
        if value - before[3] < _LEAST_GAIN:
            break
    return _laplace(space, evidence, reading, weights, place)


def _laplace(space: Space, evidence, reading: Reading, weights, place) -> Mode:
    factor = _factor(space, reading)
    eta, tau, bend = (part[:, 0] for part in space.spread_all(weights[:, None]))
    half_log_det = np.log(np.diagonal(factor)).sum() - 0.5 * np.log(reading.noise).sum()
    return Mode(
        space=space,
        weights=weights,
        place=place,
        eta=space.priors[0].mean + eta,
        tau=space.priors[1].mean + tau,
        bend=bend,
        log_evidence=float(
            reading.log_likelihood - 0.5 * weights @ (place - space.mean) - half_log_det
        ),
        slope=reading.slope,
        noise=reading.noise,
        missing=reading.missing,
        target=evidence.in_log_odds(reading, place),
    )


def draw_about(mode: Mode, design: Design, evidence: Evidence, normals):
    """Draw (eta, tau) of all pathways and t2 of the units from the posterior.

    Draws of Laplace's approximation would leave the curved set of laws that the data
    allow, so each is the mode of a problem of its own: prior mean and targets are
    replaced by draws of them (randomize, then optimize; Bardsley, Solonen, Haario &
    Laine 2014, SIAM J Sci Comput 36:A1895, without their weights). For linear
    problems that is exact.

    Parameters
    ----------
    mode : Mode
    design, evidence
        As for `find_mode`.
    normals : float (draws, m)
        Standard normals, `normals_needed` of them a draw.

    Returns
    -------
    eta, tau : (draws, pathways)
    bend : (draws, units)
    """
    units, everyone = evidence.pathways, design.pathways_n
    features = mode.space.priors[0].features.shape[1]
    cuts = np.cumsum([features, everyone, features, everyone, units.size])
    parts = np.split(normals, cuts, axis=1)
    eta = mode.space.priors[0].draw(parts[0], parts[1])
    tau = mode.space.priors[1].draw(parts[2], parts[3])
    bend = parts[4] * np.sqrt(mode.space.bends)
    begin = np.concatenate([eta[:, units], tau[:, units], bend], axis=1)
    shaken = mode.target.value + parts[5] * np.sqrt(mode.target.noise)
    weights = np.column_stack(
        [
            _settle(mode, evidence, begin[draw], shaken[draw])
            for draw in range(normals.shape[0])
        ]
    )
    more = mode.space.spread_all(weights)
    return eta + more[0].T, tau + more[1].T, bend + more[2].T


def _settle(mode: Mode, evidence: Evidence, begin, target) -> np.ndarray:
    """Return weights v so that begin + K v is the mode of a shaken problem."""
    space, noise = mode.space, mode.target.noise

    def look(weights):
        place = begin + space.spread(weights)
        value, slope, _ = evidence.predicted(place)
        loss = ((target - value) ** 2 / noise).sum() + weights @ (place - begin)
        return place, value, slope, 0.5 * float(loss)

    weights = np.zeros(begin.size)
    place, value, slope, loss = look(weights)
    for _ in range(_MOST_SETTLING):
        away = target - value + slope @ (place - begin)
        full = slope.T @ solve(space.system(slope, noise), away, assume_a="pos")
        before, share = loss, 1.0
        while True:
            tried = weights + share * (full - weights)
            found = look(tried)
            if found[3] < before or share < _LEAST_SHARE:
                break
            share /= 2
        if not found[3] < before:
            break
        weights, (place, value, slope, loss) = tried, found
        if before - loss < _LEAST_LOSS:
            break
    return weights


def normals_needed(design: Design, evidence: Evidence) -> int:
    """Return how many standard normals one draw takes."""
    features = 5 + 2 * design.types_n
    return 2 * (features + design.pathways_n) + evidence.pathways.size + evidence.size
