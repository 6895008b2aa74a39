"""The fair test of one number: a recording against what the circuit would show.

The circuit is a draw itself: with K of its N pairs connected, k of n pairs recorded from
the same law follow the beta-binomial distribution with K + 1/2 and N - K + 1/2
(Jeffreys' prior). Where cells were recorded together, counts vary more; the
distribution is widened to the design effect that virtual clusters of the circuit
show (Kish 1965, Survey Sampling).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq
from scipy.stats import beta, betabinom, t

POWER = 0.80
_MOST_RATIO = 1e4


@dataclass(frozen=True)
class Shares:
    """A share of the circuit, K of N, and a design effect."""

    found: int
    total: int
    design_effect: float = 1.0

    @property
    def p(self) -> float:
        """The circuit's share."""
        return self.found / self.total

    def predictive(self, n: int, factor: float = 1.0):
        """Return the distribution of k among n, the share times a factor."""
        a, b = self.found + 0.5, self.total - self.found + 0.5
        mean = min(factor * a / (a + b), 1.0 - 1e-12)
        # 1 / (a + b + 1) is the correlation that the circuit's own draw brings.
        within = 1.0 / (a + b + 1.0)
        clustered = (self.design_effect - 1.0) / max(n - 1, 1)
        shared = min(within + clustered, 0.999)
        size = 1.0 / shared - 1.0
        return betabinom(n, mean * size, (1.0 - mean) * size)


def place_of(k: int, distribution) -> float:
    """Return P(K < k) + P(K = k) / 2, the mid-distribution place of k."""
    return float(distribution.cdf(k) - distribution.pmf(k) / 2)


def two_sided(place: float) -> float:
    """Return the two-sided mid-p-value (Lancaster 1961, J Am Stat Assoc 56:223)."""
    return float(min(1.0, 2 * min(place, 1 - place)))


def _acceptance(distribution, n: int, level: float) -> tuple[int, int]:
    """Return the least and the largest k that are not rejected at a level."""
    counts = np.arange(n + 1)
    pmf = distribution.pmf(counts)
    place = np.cumsum(pmf) - pmf / 2
    kept = np.flatnonzero(np.minimum(place, 1 - place) >= level / 2)
    return (int(kept[0]), int(kept[-1])) if kept.size else (0, -1)


def detectable_ratio(shares: Shares, n: int, level: float) -> float | None:
    """Return the smallest ratio above 1 that n pairs find with 80 % power.

    The ratio is that of the measured tissue's probability to the circuit's. None where
    no probability up to 1 would be found.
    """
    low, high = _acceptance(shares.predictive(n), n, level)

    def power(ratio: float) -> float:
        other = shares.predictive(n, ratio)
        return float(1.0 - (other.cdf(high) - other.cdf(low - 1)))

    most = min((1.0 - 1e-9) / max(shares.p, 1e-12), _MOST_RATIO)
    if most <= 1.0 or power(most) < POWER:
        return None
    return float(brentq(lambda ratio: power(ratio) - POWER, 1.0, most, xtol=1e-4))


def ratio_interval(shares: Shares, k: int, n: int) -> tuple[float, float, float]:
    """Return circuit over measured probability, with its 95 % interval.

    The exact interval of Clopper & Pearson (1934), at the effective sample size of
    clustered pairs; infinite where nothing was found connected.
    """
    size = n / shares.design_effect
    hits = k * size / n
    low = 0.0 if k == 0 else float(beta.ppf(0.025, hits, size - hits + 1))
    high = 1.0 if k == n else float(beta.ppf(0.975, hits + 1, size - hits))
    measured = k / n
    with np.errstate(divide="ignore", invalid="ignore"):
        ratios = shares.p / np.array([measured, high, low])
    return tuple(float(ratio) for ratio in ratios)


def mean_p_value(mean, sd, n: int, circuit_mean, circuit_sd, circuit_n: int) -> float:
    """Return the two-sided p-value of two means (Welch 1947, Biometrika 34:28).

    Without a recorded spread the circuit's stands in for it.
    """
    own = (circuit_sd if sd is None else sd) ** 2 / n
    other = circuit_sd**2 / circuit_n
    variance = own + other
    if variance <= 0.0:
        return 1.0 if mean == circuit_mean else 0.0
    freedom = variance**2 / (
        own**2 / max(n - 1, 1) + other**2 / max(circuit_n - 1, 1) + 1e-300
    )
    score = (mean - circuit_mean) / np.sqrt(variance)
    return float(2 * t.sf(abs(score), max(freedom, 1.0)))
