"""The law of one pair: how many of its appositions become synapses.

An ordered pair with `a` appositions has `s` synapses with probability

    P(s | a) = C(a, s) exp(t0 [s > 0] + t1 s + t2 s^2) / Z(a)

the distribution of largest entropy over subsets of appositions with a given
probability of connection, a given mean number of synapses and, where t2 is not 0, a
given spread (Jaynes 1957, Phys Rev 106:620). Every subset of one size is equally
likely. With S_a = log sum_{s >= 1} C(a, s) exp(t1 s + t2 s^2) the log-odds of
connection are t0 + S_a. For t2 = 0 the number of synapses of a connection is
binomial, cut at zero, with q = 1 / (1 + exp(-t1)).

t0 may be infinite: minus infinity connects no pair, plus infinity every pair with an
apposition. t1 and t2 are finite.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy import special

# Below it log(1 + e^t) = e^t and q = e^t to the last bit of a double.
_LEAST_EXPONENT = -38.0


class Ways(NamedTuple):
    """Sum over the subsets of a pair, and the moments of a connection's synapses.

    Attributes
    ----------
    log_sum : ndarray
        S_a; minus infinity where there is no apposition.
    mean, variance : ndarray
        Of the number of synapses given connection; NaN where a is 0.
    """

    log_sum: np.ndarray
    mean: np.ndarray
    variance: np.ndarray


def _log_terms(a, t1, t2) -> tuple[np.ndarray, np.ndarray]:
    """Return s = 1..max(a), and log(C(a, s) exp(t1 s + t2 s^2)) on a last axis of s.

    Minus infinity where s > a.
    """
    a, t1, t2 = (each[..., None] for each in np.broadcast_arrays(a, t1, t2))
    a = a.astype(np.int64)
    s = np.arange(1, max(a.max(initial=0), 1) + 1)
    log_factorial = special.gammaln(np.arange(s.size + 1) + 1.0)
    rest = np.maximum(a - s, 0)
    log_binomial = log_factorial[a] - log_factorial[s] - log_factorial[rest]
    log_terms = log_binomial + (t1 + t2 * s) * s
    return s, np.where(s <= a, log_terms, -np.inf)


def _log_sum(log_terms: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the log of the sum over the last axis, and each term's share of it.

    Shares are NaN where all terms are minus infinity.
    """
    largest = log_terms.max(axis=-1, keepdims=True)
    with np.errstate(invalid="ignore"):
        share = np.exp(log_terms - largest)
        total = share.sum(axis=-1, keepdims=True)
        log_sum = np.where(np.isinf(largest), largest, largest + np.log(total))
        return log_sum[..., 0], share / total


def _summed_ways(a, t1, t2) -> Ways:
    """Sum term by term; time and memory grow with the largest `a`."""
    s, log_terms = _log_terms(a, t1, t2)
    log_sum, share = _log_sum(log_terms)
    mean = share @ s
    variance = (share * (s - mean[..., None]) ** 2).sum(axis=-1)
    return Ways(log_sum, mean, variance)


def _binomial_ways(a, t1) -> Ways:
    """Use the closed forms of t2 = 0: the binomial cut at zero."""
    a, t1 = np.broadcast_arrays(np.asarray(a, float), np.asarray(t1, float))
    mild = np.maximum(t1, _LEAST_EXPONENT)
    softplus = np.logaddexp(0.0, mild)
    log_softplus = np.where(t1 < mild, t1, np.log(softplus))
    # x = -log(1 - q)^a, so that 1 - exp(-x) is the chance of one synapse or more.
    x = a * np.where(t1 < mild, np.exp(t1), softplus)
    small = np.minimum(x, 1.0)
    large = np.maximum(x, 1.0)
    with np.errstate(divide="ignore"):
        log_small = np.log(a) + log_softplus + np.log(special.exprel(small))
    log_sum = np.where(x < 1.0, log_small, large + np.log1p(-np.exp(-large)))
    mean = special.expit(mild) / softplus / special.exprel(-x)
    mean = np.where(a > 0, mean, np.nan)
    # Equals mean (1 - q + a q - mean) without its cancellation for large a.
    variance = mean * (special.expit(-t1) - mean * np.exp(-x))
    return Ways(log_sum, mean, np.where(a == 1, 0.0, np.maximum(variance, 0.0)))


def ways(a, t1, t2=0.0) -> Ways:
    """Return S_a with the mean and variance of a connection's synapses.

    Parameters
    ----------
    a : array_like of int
        Appositions of a pair, 0 or more.
    t1, t2 : array_like of float
        Parameters of the law, broadcast against `a`. Where any t2 is not 0 the sum is
        formed term by term, with memory of the size of `a` times its largest value.

    Returns
    -------
    Ways
        Arrays of the common shape.
    """
    a, t2 = np.asarray(a), np.asarray(t2, dtype=float)
    if np.any(t2):
        return _summed_ways(a, np.asarray(t1, dtype=float), t2)
    broadcast = np.broadcast_arrays(a, t1, t2)
    return _binomial_ways(broadcast[0], broadcast[1])


def log_ways(a, t1, t2=0.0) -> np.ndarray:
    """Return S_a, the log of the sum over all subsets but the empty one; see `ways`."""
    return ways(a, t1, t2).log_sum


def log_odds(log_sum, t0) -> np.ndarray:
    """Return the log-odds of connection t0 + S_a; minus infinity without appositions."""
    log_sum, t0 = np.broadcast_arrays(log_sum, t0)
    touching = np.isfinite(log_sum)
    return np.where(touching, t0 + np.where(touching, log_sum, 0.0), -np.inf)


def connection_probability(a, t0, t1, t2=0.0) -> np.ndarray:
    """Return the probability that a pair with `a` appositions is connected."""
    return special.expit(log_odds(log_ways(a, t1, t2), t0))


def mean_synapses(a, t1, t2=0.0) -> np.ndarray:
    """Return the mean number of synapses of a connection; NaN where a is 0."""
    return ways(a, t1, t2).mean


def sd_synapses(a, t1, t2=0.0) -> np.ndarray:
    """Return the standard deviation of a connection's synapses; NaN where a is 0."""
    return np.sqrt(ways(a, t1, t2).variance)


def expected_synapses(a, t0, t1, t2=0.0) -> np.ndarray:
    """Return the mean number of synapses of a pair, connected or not."""
    found = ways(a, t1, t2)
    probability = special.expit(log_odds(found.log_sum, t0))
    return probability * np.nan_to_num(found.mean)


def synapse_distribution(a, t0, t1, t2=0.0) -> np.ndarray:
    """Return P(s | a) for s = 0 .. max(a) on a last axis.

    With t0 = infinity it is the distribution given connection, where a > 0.
    """
    a, t0, t1, t2 = np.broadcast_arrays(np.asarray(a), t0, t1, t2)
    log_sum, share = _log_sum(_log_terms(a, t1, t2)[1])
    odds = log_odds(log_sum, t0)
    given = np.where(a[..., None] > 0, share, 0.0)
    unconnected, connected = special.expit(-odds), special.expit(odds)
    full = [unconnected[..., None], connected[..., None] * given]
    return np.concatenate(full, axis=-1)[..., : max(a.max(initial=0), 0) + 1]


@dataclass(frozen=True)
class Histogram:
    """Shares of pairs by their number of appositions, without the empty ones.

    Attributes
    ----------
    a : float64 (n,)
        Numbers of appositions that occur, 1 or more, increasing.
    share : float64 (n,)
        Pairs with so many, as a share of all pairs, those without any included.
    """

    a: np.ndarray
    share: np.ndarray

    @classmethod
    def of(cls, counts) -> Histogram:
        """Make one of dense counts of pairs, indexed by the number of appositions.

        Raises ValueError when there is no pair, or a count below zero.
        """
        counts = np.asarray(counts, dtype=float)
        if counts.ndim != 1 or not np.all(counts >= 0) or not counts.sum() > 0:
            raise ValueError("a histogram must hold counts of pairs, at least one pair")
        a = np.flatnonzero(counts[1:]) + 1
        return cls(a.astype(float), counts[a] / counts.sum())

    @property
    def touching(self) -> float:
        """Share of the pairs with an apposition: the highest probability possible."""
        return float(self.share.sum())


@dataclass(frozen=True)
class Moments:
    """What a law predicts for pairs that a protocol draws, with first derivatives.

    Attributes
    ----------
    probability : float
        Share of the pairs that are connected.
    synapses_mean, synapses_sd : float
        Of the connections' numbers of synapses; the limit where no pair is connected,
        NaN where no pair touches.
    probability_slope, mean_slope : float64 (2,)
        Derivatives with respect to t0 and t1, at fixed t2.
    mean_slope_at_probability : float
        Derivative of the mean with respect to t1 while t0 holds the probability.
    """

    probability: float
    synapses_mean: float
    synapses_sd: float
    probability_slope: np.ndarray
    mean_slope: np.ndarray
    mean_slope_at_probability: float


def weigh(histogram: Histogram, found: Ways, t0: float) -> Moments:
    """Return the moments over a histogram, from the `ways` of its `a` and t0."""
    odds = t0 + found.log_sum
    connected, free = special.expit(odds), special.expit(-odds)
    probability = float(histogram.share @ connected)
    weight = _connection_shares(histogram, found.log_sum, odds, t0)
    mean = weight @ found.mean
    from_mean = found.mean - mean
    variance = weight @ (found.variance + from_mean**2)
    # The log of P(connected | a) moves by `free` with t0, by `free` * mean with t1.
    moved = weight * free
    t0_on_mean = moved @ from_mean
    t1_on_mean = weight @ found.variance + (moved * found.mean) @ from_mean
    level = moved.sum()
    along = (moved @ found.mean) / level if level > 0 else 0.0
    return Moments(
        probability=probability,
        synapses_mean=mean,
        synapses_sd=float(np.sqrt(variance)),
        probability_slope=probability * np.array([level, moved @ found.mean]),
        mean_slope=np.array([t0_on_mean, t1_on_mean]),
        mean_slope_at_probability=float(t1_on_mean - along * t0_on_mean),
    )


def _connection_shares(histogram, log_sum, odds, t0) -> np.ndarray:
    """Share of the connections that pairs of each `a` hold; the limit for t0 = -inf."""
    log_share = np.log(histogram.share)
    log_weight = log_share + (log_sum if t0 == -np.inf else special.log_expit(odds))
    return special.softmax(log_weight) if log_weight.size else log_weight


def moments(histogram, t0: float, t1: float, t2: float = 0.0) -> Moments:
    """Return what a law predicts over the pairs that a protocol could draw.

    Parameters
    ----------
    histogram : Histogram or array_like (n,)
        Pairs by number of appositions, those with none included.
    t0, t1, t2 : float
        The law.
    """
    if not isinstance(histogram, Histogram):
        histogram = Histogram.of(histogram)
    if not histogram.a.size:
        none = np.zeros(2)
        return Moments(0.0, np.nan, np.nan, none, none * np.nan, np.nan)
    return weigh(histogram, ways(histogram.a, t1, t2), t0)
