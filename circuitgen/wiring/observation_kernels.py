"""Compiled sums of the law: ways to connect, moments, and what recordings would show."""

from __future__ import annotations

import numpy as np

from circuitgen.core.compilation import kernel

# Terms are rescaled when they pass this, long before they overflow, as long as the
# exponents are within these bounds; beyond them everything is kept in logarithms.
_LARGE = 1e200
_MOST_T1 = 100.0
_MOST_BEND = 20.0


@kernel
def _softplus(x):
    return max(x, 0.0) + np.log1p(np.exp(-abs(x)))


@kernel
def _sums_in_logs(a, t1, t2, out):
    """Do what `_sums` does for exponents of any size."""
    top = log_term = np.log(float(a)) + t1 + t2
    for s in range(1, a):
        log_term += np.log((a - s) / (s + 1.0)) + t1 + t2 * (2 * s + 1)
        top = max(top, log_term)
    log_term = np.log(float(a)) + t1 + t2
    total = 0.0
    for s in range(1, a + 1):
        term, power = np.exp(log_term - top), 1.0
        total += term
        for k in range(1, 5):
            power *= s
            out[k] += term * power
        if s < a:
            log_term += np.log((a - s) / (s + 1.0)) + t1 + t2 * (2 * s + 1)
    out[0] = top + np.log(total)
    for k in range(1, 5):
        out[k] /= total


@kernel
def _sums(a, t1, t2, out):
    """Fill `out` (5,) with S_a and E[s^k], k = 1 .. 4, of a connected pair.

    Term s is C(a, s) exp(t1 s + t2 s^2); each follows from the one before.
    """
    out[0], out[1], out[2], out[3], out[4] = -np.inf, 0.0, 0.0, 0.0, 0.0
    if a == 0:
        return
    if abs(t1) > _MOST_T1 or abs(t2) * a > _MOST_BEND:
        _sums_in_logs(a, t1, t2, out)
        return
    ratio, bend = np.exp(t1 + 3.0 * t2), np.exp(2.0 * t2)
    # The first term is taken out and comes back as a logarithm.
    term, total = 1.0, 0.0
    shift = np.log(float(a)) + t1 + t2
    for s in range(1, a + 1):
        total += term
        part = term
        for k in range(1, 5):
            part *= s
            out[k] += part
        term *= ratio * (a - s) / (s + 1.0)
        ratio *= bend
        if term > _LARGE:
            term, total = term / _LARGE, total / _LARGE
            for k in range(1, 5):
                out[k] /= _LARGE
            shift += np.log(_LARGE)
    out[0] = shift + np.log(total)
    for k in range(1, 5):
        out[k] /= total


@kernel
def fill_sums(a, t1, t2, out):
    """Fill `out` (n, 5) with S_a and E[s^k], k = 1 .. 4, row by row."""
    for i in range(a.size):
        _sums(a[i], t1[i], t2[i], out[i])


@kernel
def _joined(odds):
    """Return P(connected) and P(connected) P(not) from the log odds."""
    share = 1.0 / (1.0 + np.exp(-odds))
    return share, share / (1.0 + np.exp(odds)) if odds < 700.0 else 0.0


@kernel
def observe_entries(
    row, unit, pair, appositions, lost, weight, eta, t1, t2, middle, reference,
    shown, slopes,
):  # fmt: skip
    """Add what every entry shows to its row.

    Parameters
    ----------
    row, unit, pair, appositions, lost, weight : (entries,)
        See `Entries`.
    eta, t1, t2, middle : (units,)
    reference : (units, 5)
        `fill_sums` at the reference number of appositions.
    shown : (3, rows)
        Probability seen, E[s] and E[s^2] of the synapses seen; added to.
    slopes : (3, pairs, 3)
        Their slopes in eta, tau and t2 of the pair's unit; added to.
    """
    sums, lost_sums = np.zeros(5), np.zeros(5)
    change, lost_change = np.zeros(3), np.zeros(3)
    own = np.zeros((2, 3))
    for i in range(row.size):
        r, u, a, c, w = row[i], unit[i], appositions[i], lost[i], weight[i]
        place = pair[i]
        base = eta[u] - reference[u, 0]
        _sums(a, t1[u], t2[u], sums)
        odds = base + sums[0]
        share, stay = _joined(odds)
        by_t1 = sums[1] - reference[u, 1]
        change[0], change[1] = 1.0, by_t1
        change[2] = sums[2] - reference[u, 2] - 2.0 * middle[u] * by_t1
        kept = (a - c) / a
        both = kept * (a - c - 1) / (a - 1) if a > 1 else 0.0
        # E[s^k] of connected pairs moves with t1 and t2, not with eta.
        for k in range(2):
            value = sums[k + 1]
            more = sums[k + 2] - value * sums[1]
            own[k, 0], own[k, 1] = 0.0, more
            own[k, 2] = sums[k + 3] - value * sums[2] - 2.0 * middle[u] * more
        p, first = share, share * kept * sums[1]
        second = share * (both * (sums[2] - sums[1]) + kept * sums[1])
        unseen = 0.0
        lost_share = 0.0
        if c > 0:
            _sums(c, t1[u], t2[u], lost_sums)
            lost_odds = base + lost_sums[0]
            unseen = np.exp(_softplus(lost_odds) - _softplus(odds))
            p, lost_share = 1.0 - unseen, _joined(lost_odds)[0]
            by_t1 = lost_sums[1] - reference[u, 1]
            lost_change[0], lost_change[1] = 1.0, by_t1
            lost_change[2] = lost_sums[2] - reference[u, 2] - 2.0 * middle[u] * by_t1
        shown[0, r] += w * p
        shown[1, r] += w * first
        shown[2, r] += w * second
        for kind in range(3):
            p_slope = stay * change[kind]
            if c > 0:
                p_slope = share * change[kind] - lost_share * lost_change[kind]
                p_slope *= unseen
            one = stay * change[kind] * sums[1] + share * own[0, kind]
            two = stay * change[kind] * sums[2] + share * own[1, kind]
            slopes[0, place, kind] += w * p_slope
            slopes[1, place, kind] += w * kept * one
            slopes[2, place, kind] += w * (both * (two - one) + kept * one)
