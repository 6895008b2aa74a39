"""The law of one pair: how many of its appositions become synapses.

Among all distributions over subsets of a pair's `a` appositions that meet the expected
connection probability, number of synapses and, if measured, its spread, the one of
largest entropy (Jaynes 1957, Phys Rev 106:620) gives a subset of size s the weight
exp(t0*[s > 0] + t1*s + t2*s**2). Everything is kept in logarithms.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import expit, gammaln, logsumexp, softmax

NEVER = -np.inf


@dataclass(frozen=True)
class Law:
    """Exponents of a pathway's law; t0 = -inf means that pairs never connect."""

    t0: float
    t1: float
    t2: float = 0.0


def softplus(x: np.ndarray) -> np.ndarray:
    """Return log(1 + exp(x))."""
    return np.logaddexp(0.0, x)


def _log_weights(a: np.ndarray, t1: float, t2: float) -> tuple[np.ndarray, np.ndarray]:
    """Log weight of every size 1 .. max(a), -inf where it exceeds a; and the sizes."""
    s = np.arange(1, max(int(a.max(initial=1)), 1) + 1)
    room = a[:, None] - s[None, :]
    log_choose = (
        gammaln(a[:, None] + 1.0) - gammaln(s + 1.0) - gammaln(np.maximum(room, 0) + 1.0)
    )
    weights = log_choose + t1 * s + t2 * s.astype(float) ** 2
    return np.where(room >= 0, weights, -np.inf), s


def log_ways(a: np.ndarray, t1: float, t2: float = 0.0) -> np.ndarray:
    """Return S_a = log sum over s >= 1 of C(a, s) exp(t1 s + t2 s**2); -inf for a = 0.

    For t2 = 0 the sum is closed: log(expm1(a softplus(t1))).
    """
    a = np.asarray(a)
    if t2 == 0.0:
        with np.errstate(divide="ignore", over="ignore"):
            x = a * softplus(t1)
            return np.where(x > 30.0, x, np.log(np.expm1(np.minimum(x, 30.0))))
    weights, _ = _log_weights(a, t1, t2)
    with np.errstate(divide="ignore"):
        return logsumexp(weights, axis=1)


def count_moments(
    a: np.ndarray, t1: float, t2: float = 0.0
) -> tuple[np.ndarray, np.ndarray]:
    """Return mean and mean square of the synapses of a connected pair, by `a`.

    For t2 = 0 the number is a binomial without its zero. Zero where a = 0.
    """
    a = np.asarray(a, dtype=np.float64)
    if t2 == 0.0:
        q = expit(t1)
        connected = -np.expm1(-a * softplus(t1))
        with np.errstate(invalid="ignore", divide="ignore"):
            mean = np.where(a > 0, a * q / connected, 0.0)
            square = mean * (1.0 - q + a * q)
        return mean, square
    weights, s = _log_weights(a.astype(int), t1, t2)
    shares = np.zeros_like(weights)
    some = a > 0
    shares[some] = softmax(weights[some], axis=1)
    return shares @ s, shares @ (s.astype(float) ** 2)


def connection_probability(a: np.ndarray, law: Law) -> np.ndarray:
    """Return P(at least one synapse | a appositions)."""
    return expit(law.t0 + log_ways(a, law.t1, law.t2))


def expected_synapses(a: np.ndarray, law: Law) -> np.ndarray:
    """Return the expected number of synapses of a pair, unconnected pairs included."""
    mean, _ = count_moments(a, law.t1, law.t2)
    return connection_probability(a, law) * mean


def size_distribution(a: int, law: Law) -> np.ndarray:
    """Return P(s synapses | a appositions) for s = 0 .. a."""
    if a == 0:
        return np.ones(1)
    weights, _ = _log_weights(np.array([a]), law.t1, law.t2)
    return softmax(np.concatenate([[0.0], law.t0 + weights[0]]))


@dataclass(frozen=True)
class Moments:
    """Connection probability of a histogram of pairs; mean and sd given connection."""

    probability: float
    mean: float
    sd: float


def moments(histogram: np.ndarray, law: Law) -> Moments:
    """Return what a law predicts for pairs with the given histogram of appositions.

    `histogram[a]` counts (or weighs) the pairs with `a` appositions, a = 0 included.
    Mean and sd are NaN when nothing connects.
    """
    a = np.flatnonzero(histogram)
    weight = histogram[a] / histogram.sum()
    joined = weight * connection_probability(a, law)
    p = float(joined.sum())
    if p <= 0.0:
        return Moments(0.0, np.nan, np.nan)
    mean, square = count_moments(a, law.t1, law.t2)
    m = float(joined @ mean) / p
    return Moments(p, m, float(np.sqrt(max(joined @ square / p - m * m, 0.0))))
