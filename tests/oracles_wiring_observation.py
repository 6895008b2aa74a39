"""What pairs show under a law, by plain enumeration of the numbers of synapses."""

from __future__ import annotations

import math

import numpy as np
from scipy.stats import hypergeom


def size_shares(a, t1, t2):
    """Return the shares of s = 1 .. a among connected pairs, and S_a."""
    logs = [math.log(math.comb(a, s)) + t1 * s + t2 * s * s for s in range(1, a + 1)]
    top = max(logs)
    total = sum(math.exp(x - top) for x in logs)
    return [math.exp(x - top) / total for x in logs], top + math.log(total)


def seen(a, lost, t0, t1, t2):
    """Return P(seen connected), E[s] and E[s^2] of what is seen of one pair."""
    shares, ways = size_shares(a, t1, t2)
    connected = 1 / (1 + math.exp(-t0 - ways))
    p = first = second = 0.0
    for s, share in enumerate(shares, start=1):
        # Of a sites, s carry synapses; a - lost of the sites are kept.
        kept = np.arange(0, s + 1)
        chance = hypergeom.pmf(kept, a, s, a - lost)
        p += connected * share * (1 - chance[0])
        first += connected * share * float(chance @ kept)
        second += connected * share * float(chance @ kept**2)
    return p, first, second


def rows_shown(entries, eta, tau, t2, middle):
    """Return (3, rows): what every row of entries shows."""
    out = np.zeros((3, entries.rows_n))
    for row, unit, a, lost, weight in zip(
        entries.row, entries.unit, entries.a, entries.lost, entries.weight, strict=True
    ):
        t1 = tau[unit] - 2 * t2[unit] * middle[unit]
        _, reference = size_shares(5, t1, t2[unit])
        law = (eta[unit] - reference, t1, t2[unit])
        out[:, row] += weight * np.array(seen(int(a), int(lost), *law))
    return out
