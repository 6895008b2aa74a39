"""Laws that meet measurements exactly, and what can be met at all.

A histogram h counts the pairs that a recording could have sampled by their number of
appositions, pairs without any included. What is feasible follows from
h alone: let G(s) be the share of pairs with at least s appositions.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq
from scipy.special import expit

from circuitgen.wiring.law import NEVER, Law, count_moments, log_ways, moments

# Exponents at which a limit (all connect, one synapse each, all sites used) is reached
# to machine precision.
_LIMIT = 45.0
_TINY = 1e-12
# Log odds closer than this are equal: the rounding of some hundred terms.
_CLOSE = 1e-13
_PLAIN = Law(0.0, 0.0)


@dataclass(frozen=True)
class Match:
    """A law, whether it meets every target, and in words what stands in the way."""

    law: Law
    feasible: bool
    note: str


def _shares(histogram: np.ndarray) -> np.ndarray:
    """G(s) for s = 1, 2, ...: share of pairs with at least s appositions."""
    share = np.asarray(histogram, float) / np.sum(histogram)
    return np.cumsum(share[::-1])[::-1][1:]


def largest_probability(histogram: np.ndarray) -> float:
    """Return the share of pairs with an apposition: no law connects more."""
    share = _shares(histogram)
    return float(share[0]) if share.size else 0.0


def largest_mean(histogram: np.ndarray, probability: float) -> float:
    """Return the largest mean number of synapses of connections of that probability.

    It is the mean number of appositions of the best-touching pairs of that total share.
    """
    return float(np.minimum(_shares(histogram), probability).sum() / probability)


def spread_range(
    histogram: np.ndarray, probability: float, mean: float
) -> tuple[float, float]:
    """Return the least and largest sd of synapses that p and mean leave open.

    With y_s the share of pairs with at least s synapses, the mean square is
    sum (2s - 1) y_s. It is least when low s are filled first, up to min(p, G(s)), and
    largest when the best-touching pairs use all their sites and the others one.
    """
    cap = np.minimum(_shares(histogram), probability)
    before = np.concatenate([[0.0], np.cumsum(cap)[:-1]])
    filled = np.clip(probability * mean - before, 0.0, cap)
    odd = 2.0 * np.arange(1, cap.size + 1) - 1.0
    low = odd @ filled / probability - mean**2
    mass = cap - np.append(cap[1:], 0.0)
    extra, square = probability * (mean - 1.0), probability
    for a in range(mass.size, 1, -1):
        used = min(mass[a - 1], extra / (a - 1))
        square += used * (a * a - 1.0)
        extra -= used * (a - 1)
    high = square / probability - mean**2
    return float(np.sqrt(max(low, 0.0))), float(np.sqrt(max(high, 0.0)))


def _rising_root(value_and_slope, low: float, high: float, start: float) -> float:
    """Return the root of a rising function of log odds between two bounds.

    Newton steps within a bracket that halves when a step leaves it, as it does where
    the slope is lost to rounding.
    """
    x = start if low < start < high else 0.5 * (low + high)
    for _ in range(200):
        value, slope = value_and_slope(x)
        low, high = (x, high) if value < 0 else (low, x)
        with np.errstate(all="ignore"):
            following = float(x - np.float64(value) / slope)
        if not low < following < high:
            following = 0.5 * (low + high)
        if abs(value) <= _CLOSE or abs(following - x) <= 1e-14 * abs(x):
            break
        x = following
    return x


def _log_odds(share: float, rest: float) -> float:
    with np.errstate(divide="ignore"):
        return np.log(max(share, 0.0)) - np.log(max(rest, 0.0))


def solve_t0(histogram: np.ndarray, probability: float, t1: float, t2: float) -> float:
    """Return the t0 that gives a feasible probability, other exponents given."""
    if probability <= 0.0:
        return NEVER
    a = np.flatnonzero(histogram)
    a = a[a > 0]
    weight, ways = histogram[a] / np.sum(histogram), log_ways(a, t1, t2)
    most = weight.sum()
    if probability >= most * (1 - _TINY):
        return _LIMIT - float(ways.min())
    odds = _log_odds(probability, most - probability)

    def excess(t0: float) -> tuple[float, float]:
        joined, apart = expit(t0 + ways), expit(-t0 - ways)
        p, rest = weight @ joined, weight @ apart
        with np.errstate(all="ignore"):
            slope = weight @ (joined * apart) * most / (p * rest)
        return _log_odds(p, rest) - odds, slope

    low, high = odds - float(ways.max()) - 1e-9, odds - float(ways.min()) + 1e-9
    return _rising_root(excess, low, high, 0.5 * (low + high))


def _profile(histogram, probability: float, t1: float, t2: float) -> Law:
    return Law(solve_t0(histogram, probability, t1, t2), t1, t2)


def _match_mean(histogram, probability, mean, near: Law = _PLAIN) -> Law:
    """Meet a probability and a feasible mean with the t2 of a law that lies near."""
    t2 = near.t2
    top = largest_mean(histogram, probability)
    odds = _log_odds(mean - 1, top - mean)

    def excess(t1: float) -> tuple[float, float]:
        law = _profile(histogram, probability, t1, t2)
        m = moments(histogram, law).mean
        dp, dm = gradient(histogram, law)
        with np.errstate(all="ignore"):
            # t0 follows t1 so that the probability stays where it is.
            slope = dm[1] - dm[0] * dp[1] / dp[0]
            slope *= (top - 1) / ((m - 1) * (top - m))
        return _log_odds(m - 1, top - m) - odds, slope

    largest_a = int(np.flatnonzero(histogram).max())
    # With t2 the exponent of one synapse more is t1 + t2 (2 s + 1).
    high = _LIMIT + abs(t2) * (2 * largest_a + 1)
    for limit, reached in ((-high, mean <= 1.0), (high, mean >= top)):
        if reached:
            return _profile(histogram, probability, limit, t2)
    t1 = _rising_root(excess, -high, high, near.t1)
    return _profile(histogram, probability, t1, t2)


def _match_spread(histogram, probability, mean, sd, without: Law) -> Law:
    """Meet a probability, a mean and a feasible sd; the sd rises with t2."""
    law = without

    def excess(t2: float) -> float:
        nonlocal law
        # About the mean, t1 + 2 t2 s is what decides one synapse more or less.
        near = Law(law.t0, law.t1 - 2 * (t2 - law.t2) * mean, t2)
        law = _match_mean(histogram, probability, mean, near)
        return moments(histogram, law).sd - sd

    low, high = -0.25, 0.25
    while excess(low) > 0 and low > -_LIMIT:
        low *= 2
    while excess(high) < 0 and high < _LIMIT:
        high *= 2
    for limit, reached in ((low, excess(low) >= 0), (high, excess(high) <= 0)):
        if reached:
            excess(limit)
            return law
    excess(brentq(excess, low, high, xtol=1e-12, rtol=1e-12))
    return law


def match(
    histogram: np.ndarray,
    probability: float,
    synapses_mean: float | None = None,
    synapses_sd: float | None = None,
    t1_given: float = 0.0,
) -> Match:
    """Return the law of largest entropy that meets the targets over a histogram.

    Parameters
    ----------
    histogram : (n,)
        Pairs by number of appositions, from 0.
    probability : float
        Connection probability over these pairs.
    synapses_mean, synapses_sd : float, optional
        Synapses per connection and their standard deviation.
    t1_given : float
        The exponent t1 to use when no mean is given; 0 adds no information.

    Returns
    -------
    Match
        For targets that cannot be met, the nearest law that exists, with the feasible
        range in the note.
    """
    histogram = np.asarray(histogram, float)
    notes = []
    most = largest_probability(histogram)
    if most <= 0.0:
        note = "no pair in the window has an apposition: probability 0 is all there is"
        return Match(Law(NEVER, t1_given), probability == 0.0, note)
    if probability > most:
        notes.append(
            f"probability {probability:.4g} is out of reach: at most {most:.4g}"
        )
        probability = most
    if synapses_mean is None or probability <= 0.0:
        law = _profile(histogram, probability, t1_given, 0.0)
        return Match(law, not notes, "; ".join(notes))
    top = largest_mean(histogram, probability)
    if synapses_mean > top + 1e-9:
        notes.append(
            f"{synapses_mean:.4g} synapses per connection are out of reach at this"
            f" probability: 1 to {top:.4g}"
        )
        synapses_mean = top
    law = _match_mean(histogram, probability, synapses_mean)
    if synapses_sd is None or notes:
        return Match(law, not notes, "; ".join(notes))
    return _with_spread(histogram, probability, synapses_mean, synapses_sd, law)


def _with_spread(histogram, probability, mean, sd, without: Law) -> Match:
    low, high = spread_range(histogram, probability, mean)
    if not low - 1e-9 <= sd <= high + 1e-9:
        note = f"a spread of {sd:.4g} synapses is out of reach: {low:.4g} to {high:.4g}"
        return Match(without, False, note)
    law = _match_spread(histogram, probability, mean, sd, without)
    two_humped = sd > moments(histogram, without).sd * (1 + 1e-6)
    note = "spread above that of the plain law: sizes pile up at both ends"
    return Match(law, True, note if two_humped else "")


def gradient(histogram: np.ndarray, law: Law) -> tuple[np.ndarray, np.ndarray]:
    """Return derivatives of probability and mean with respect to (t0, t1), t2 fixed."""
    a = np.flatnonzero(histogram)
    weight = histogram[a] / np.sum(histogram)
    each = expit(law.t0 + log_ways(a, law.t1, law.t2))
    mean, square = count_moments(a, law.t1, law.t2)
    slope = weight * each * (1 - each)
    p, total = weight @ each, weight @ (each * mean)
    dp = np.array([slope.sum(), slope @ mean])
    variance = square - mean**2
    dtotal = np.array([slope @ mean, slope @ mean**2 + (weight * each) @ variance])
    return dp, dtotal / p - total * dp / p**2
