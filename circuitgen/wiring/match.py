"""The law that meets a pathway's measurements exactly, and what can be met at all.

The law is an exponential family over the pairs of a histogram, so each measurement
rises with its own parameter while the others are held (the dual problem is convex):
t0 with the probability, t1 with the mean number of synapses, t2 with their spread.
Three nested one-dimensional searches, each inside a bracket, can therefore not fail.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from circuitgen.wiring.law import Histogram, Moments, Ways, ways, weigh

# exp(-50) is far below the last bit of a double: laws at a limit are met to rounding.
_LIMIT_EXPONENT = 50.0
_MOST_SPREAD = 25.0
# A target this close to a limit, in proportion, is at the limit.
_ROUNDING = 1e-12
_MOST_STEPS = 300
_NEXT_TO_NOTHING = 1e-300
# The square root of a variance of nothing but rounding.
_SPREAD_ROUNDING = 1e-6


@dataclass(frozen=True)
class Ranges:
    """What the pairs of a histogram allow.

    Attributes
    ----------
    probability_high : float
        Share of the pairs that touch; the lowest probability is 0.
    synapses_mean_high : float
        Mean appositions of the connected pairs if those with most are connected; the
        lowest mean is 1.
    synapses_sd_low, synapses_sd_high : float
        Spreads possible at the probability and the mean that were asked for; NaN when
        there is no mean.
    """

    probability_high: float
    synapses_mean_high: float = np.nan
    synapses_sd_low: float = np.nan
    synapses_sd_high: float = np.nan


@dataclass(frozen=True)
class Match:
    """A law, what it gives over the histogram, and whether that is what was asked.

    Attributes
    ----------
    t0, t1, t2 : float
        The law; t0 is infinite where no pair or every touching pair is connected.
    probability, synapses_mean, synapses_sd : float
        What the law gives; mean and spread NaN where no pair touches.
    feasible : bool
        False when a target lies outside its range: the law then meets the nearest
        value inside.
    note : str
        Why not, or what is unusual about the law; empty when all is plain.
    ranges : Ranges
        What the pairs allow.
    """

    t0: float
    t1: float
    t2: float
    probability: float
    synapses_mean: float
    synapses_sd: float
    feasible: bool
    note: str
    ranges: Ranges


def _tails(histogram: Histogram, probability: float) -> np.ndarray:
    """Return the most that the share of connections with s >= 1, 2, ... can be."""
    dense = np.zeros(int(histogram.a.max(initial=0)) + 1)
    dense[histogram.a.astype(int)] = histogram.share
    reach = np.cumsum(dense[::-1])[::-1][1:]
    if probability <= 0:
        return np.ones(reach.size)
    return np.minimum(reach / probability, 1.0)


def mean_high(histogram: Histogram, probability: float) -> float:
    """Return the highest mean number of synapses at a probability of connection."""
    return float(_tails(histogram, probability).sum())


def spread_range(histogram, probability: float, mean: float) -> tuple[float, float]:
    """Return the lowest and highest spread of synapses at a probability and a mean.

    The second moment is the sum of (2 s - 1) P(at least s). It is least when the
    connections fill up evenly from s = 1, as water does, and largest when as few as
    possible, those with most appositions, use all of them and the others only one.
    """
    most = _tails(histogram, probability)
    odd = 2.0 * np.arange(1, most.size + 1) - 1.0
    filled = np.clip(mean - (np.cumsum(most) - most), 0.0, most)
    # Highest: tails cut at one level, found where their sum has the right mean.
    beyond = most[1:][::-1]
    cut = np.concatenate([[0.0], beyond])
    sums = np.array([np.minimum(most[1:], level).sum() for level in cut])
    level = np.interp(mean - 1.0, sums, cut)
    highest = np.concatenate([most[:1], np.minimum(most[1:], level)])
    variances = [float(odd @ tails) - mean**2 for tails in (filled, highest)]
    low, high = np.sqrt(np.maximum(variances, 0.0))
    return float(low), float(high)


def _rising_root(value_and_slope: Callable, low: float, high: float, guess: float):
    """Find where a rising function crosses 0: Newton's steps, kept inside a bracket.

    A value or step that is not finite falls back to halving the bracket.
    """
    x = guess if low < guess < high else 0.5 * (low + high)
    for _ in range(_MOST_STEPS):
        value, slope = value_and_slope(x)
        if value == 0:
            break
        low, high = (x, high) if value < 0 else (low, x)
        with np.errstate(all="ignore"):
            new = x - value / slope
        if not low < new < high:
            new = 0.5 * (low + high)
        if abs(new - x) <= 2e-16 * max(abs(x), 1.0) or new in (low, high):
            break
        x = new
    return x


def find_t0(histogram: Histogram, log_sum, probability: float, guess=np.nan) -> float:
    """Return the t0 that gives a probability of connection.

    Infinite at 0 and at the share of touching pairs, or beyond.

    Parameters
    ----------
    histogram : Histogram
        The pairs.
    log_sum : float64 (n,)
        S_a of the histogram's `a`.
    probability : float
        The target.
    guess : float
        Where to begin, if known.
    """
    touching = histogram.touching
    if probability <= 0 or touching == 0:
        return -np.inf
    if probability >= touching * (1 - _ROUNDING):
        return np.inf
    target = np.log(probability) - np.log(touching - probability)

    def distance(t0):
        odds = t0 + log_sum
        connected, free = special.expit(odds), special.expit(-odds)
        p, rest = histogram.share @ connected, histogram.share @ free
        change = histogram.share @ (connected * free)
        with np.errstate(divide="ignore", invalid="ignore"):
            value = np.log(p) - np.log(rest) - target
            return value, change / p + change / rest

    low, high = target - log_sum.max(), target - log_sum.min()
    if high - low <= 4e-16 * max(abs(low), 1.0):
        return float(low)
    # Rounding must not leave the root outside.
    margin = 1e-9 * max(abs(low), abs(high), 1.0)
    return float(_rising_root(distance, low - margin, high + margin, guess))


class _Family:
    """Laws of one spread parameter that give one probability, by their t1."""

    def __init__(self, histogram: Histogram, probability: float):
        self.histogram, self.probability = histogram, probability
        self.t0 = np.nan

    def at(self, t1: float, t2: float) -> tuple[float, Moments]:
        """Return t0 and the moments of the law with these t1 and t2."""
        found: Ways = ways(self.histogram.a, t1, t2)
        guess = self.t0 if np.isfinite(self.t0) else np.nan
        self.t0 = find_t0(self.histogram, found.log_sum, self.probability, guess)
        return self.t0, weigh(self.histogram, found, self.t0)

    def find_t1(self, mean: float, highest: float, t2: float, guess: float) -> float:
        """Return the t1 that gives a mean; at a limit, one that differs by rounding."""
        # Far out t2 alone would use one apposition or all; t1 must outweigh it.
        outweigh = 2 * abs(t2) * self.histogram.a.max()
        low, high = -_LIMIT_EXPONENT - outweigh, _LIMIT_EXPONENT + outweigh
        if mean - 1 <= _ROUNDING:
            return low
        if highest - mean <= _ROUNDING * highest:
            return high
        target = np.log(mean - 1) - np.log(highest - mean)

        def distance(t1):
            now = self.at(t1, t2)[1]
            above, below = now.synapses_mean - 1, highest - now.synapses_mean
            with np.errstate(divide="ignore", invalid="ignore"):
                value = np.log(above) - np.log(below) - target
                slope = now.mean_slope_at_probability * (1 / above + 1 / below)
            if np.isnan(value):
                value = now.synapses_mean - mean
            return value, slope

        return float(_rising_root(distance, low, high, guess))

    def find_t2(self, mean, highest, spread, limits, t1) -> tuple[float, float]:
        """Return the t1 and t2 that give a mean and a spread between its `limits`."""
        low, high = limits[0] ** 2, limits[1] ** 2
        place = [t1, 0.0]

        def logit(variance):
            below = max(variance - low, _NEXT_TO_NOTHING)
            return np.log(below) - np.log(max(high - variance, _NEXT_TO_NOTHING))

        def distance(t2):
            # The law turns about its mean, so that t1 is known well beforehand.
            guess = place[0] - 2 * mean * (t2 - place[1])
            place[:] = self.find_t1(mean, highest, t2, guess), t2
            return logit(self.at(*place)[1].synapses_sd ** 2) - logit(spread**2)

        plain = self.at(t1, 0.0)[1].synapses_sd
        near, far = 0.0, np.copysign(0.5 / plain**2, spread - plain)
        while distance(far) * far < 0 and abs(far) < _MOST_SPREAD:
            near, far = far, 2 * far
        if distance(far) * far > 0:
            tightest = {"xtol": 1e-18, "rtol": 4 * np.finfo(float).eps}
            distance(optimize.brentq(distance, near, far, **tightest))
        return place[0], place[1]


def _check_targets(probability, synapses_mean, synapses_sd) -> None:
    if not 0 <= probability <= 1:
        raise ValueError(f"probability = {probability} must lie between 0 and 1")
    if synapses_mean is not None and not synapses_mean >= 1:
        raise ValueError(f"synapses_mean = {synapses_mean} must be >= 1")
    if synapses_sd is not None and (synapses_mean is None or not synapses_sd >= 0):
        raise ValueError(f"synapses_sd = {synapses_sd} must be >= 0, beside a mean")


class _Targets:
    """Targets moved into their ranges, with a note on each that had to move."""

    def __init__(self, histogram: Histogram):
        self.histogram = histogram
        self.notes: list[str] = []

    def _inside(self, name: str, value, low, high, given: str) -> float:
        slack = _ROUNDING * max(high, 1.0)
        if not low - slack <= value <= high + slack:
            self.notes.append(
                f"{name} {value:.4g} cannot be met: {given} it lies between "
                f"{low:.4g} and {high:.4g}"
            )
        return float(min(max(value, low), high))

    def probability(self, value: float) -> float:
        given = "since the other pairs have no apposition"
        return self._inside("probability", value, 0.0, self.histogram.touching, given)

    def mean(self, value: float, high: float) -> float:
        given = "with these appositions and this probability"
        return self._inside("synapses_mean", value, 1.0, high, given)

    def spread(self, value: float, low: float, high: float) -> float:
        given = "with these appositions, this probability and this mean"
        return self._inside("synapses_sd", value, low, high, given)


def infeasible_targets(
    histogram: Histogram, probability, synapses_mean=None, synapses_sd=None
) -> list[str]:
    """Return what a histogram cannot give and its range, in words; empty if all."""
    targets = _Targets(histogram)
    p = targets.probability(probability)
    if synapses_mean is not None and histogram.a.size:
        mean = targets.mean(synapses_mean, mean_high(histogram, p))
        if synapses_sd is not None:
            targets.spread(synapses_sd, *spread_range(histogram, p, mean))
    return targets.notes


def match(
    histogram, probability, synapses_mean=None, synapses_sd=None, *, t1: float = 0.0
) -> Match:
    """Find the law that meets measurements exactly over the pairs of a histogram.

    Parameters
    ----------
    histogram : Histogram or array_like (n,)
        Pairs that the protocol could draw by number of appositions, from 0.
    probability : float
        Probability of connection, 0 to 1.
    synapses_mean : float, optional
        Mean number of synapses of a connection, 1 or more.
    synapses_sd : float, optional
        Its standard deviation over connections; needs the mean.
    t1 : float
        Used where there is no mean, or where no pair has two appositions so that the
        mean says nothing.

    Returns
    -------
    Match
        Targets that cannot be met are said to be so, with their range, and the law
        meets the nearest value that can.

    Raises
    ------
    ValueError
        For numbers that no circuit could have, and for a histogram without pairs.
    """
    _check_targets(probability, synapses_mean, synapses_sd)
    if not isinstance(histogram, Histogram):
        histogram = Histogram.of(histogram)
    targets = _Targets(histogram)
    p = targets.probability(float(probability))
    if not histogram.a.size:
        law, ranges = (-np.inf, t1, 0.0), Ranges(histogram.touching)
        nothing = np.full(2, np.nan)
        return _report(law, (p, *nothing), targets, ranges)
    family = _Family(histogram, p)
    if synapses_mean is None:
        t0, now = family.at(t1, 0.0)
        ranges = Ranges(histogram.touching, mean_high(histogram, p))
        return _report((t0, t1, 0.0), _values(now), targets, ranges)
    return _match_synapses(family, targets, synapses_mean, synapses_sd, t1)


def _match_synapses(family, targets, mean, spread, t1) -> Match:
    histogram, p = family.histogram, family.probability
    highest = mean_high(histogram, p)
    mean = targets.mean(float(mean), highest)
    limits = spread_range(histogram, p, mean)
    ranges = Ranges(histogram.touching, highest, *limits)
    t2, humps = 0.0, ""
    if highest - 1 > _ROUNDING:
        t1 = family.find_t1(mean, highest, 0.0, t1)
    if spread is not None:
        spread = targets.spread(float(spread), *limits)
        if limits[1] - limits[0] > _SPREAD_ROUNDING:
            plain = family.at(t1, 0.0)[1].synapses_sd
            t1, t2 = family.find_t2(mean, highest, spread, limits, t1)
            humps = _two_humps(spread, plain) if t2 > 0 else ""
    t0, now = family.at(t1, t2)
    return _report((t0, t1, t2), _values(now), targets, ranges, humps)


def _two_humps(spread: float, plain: float) -> str:
    return (
        f"synapses_sd {spread:.4g} exceeds the {plain:.4g} of the law of this "
        "probability and mean: met by a law of two humps, that favours few and many "
        "synapses over the numbers between"
    )


def _values(now: Moments) -> tuple[float, float, float]:
    return now.probability, now.synapses_mean, now.synapses_sd


def _report(law, values, targets: _Targets, ranges: Ranges, humps: str = "") -> Match:
    notes, feasible = list(targets.notes), not targets.notes
    if not feasible:
        notes.append("the nearest law is used")
    note = "; ".join([*notes, humps] if humps else notes)
    numbers = (float(number) for number in (*law, *values))
    return Match(*numbers, feasible=feasible, note=note, ranges=ranges)
