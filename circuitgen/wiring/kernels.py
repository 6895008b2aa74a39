"""Compiled loops over pairs: connections, counts and sites drawn."""

from __future__ import annotations

import numpy as np

from circuitgen.core.compilation import kernel


@kernel
def _count(u, a, t1, t2, log_sum, logs):
    """Return the smallest s >= 1 whose cumulative probability exceeds `u`.

    Log-probabilities are carried from s to s + 1, so that nothing underflows.
    """
    step = t1 + t2
    log_share = logs[a] + step - log_sum
    cumulative, likeliest, highest = 0.0, 1, log_share
    for s in range(1, a + 1):
        cumulative += np.exp(log_share)
        if u < cumulative:
            return s
        if log_share > highest:
            likeliest, highest = s, log_share
        step += 2.0 * t2
        log_share += logs[a - s] - logs[s + 1] + step
    # Shares that add up to less than `u` by rounding.
    return likeliest


@kernel
def draw_counts(uniform, pathway, a, first, probability, log_sum, t1, t2, logs, out):
    """Draw the synapses of every pair: column 0 connects, column 1 counts."""
    for row in range(a.size):
        law = pathway[row]
        entry = first[law] + a[row]
        if uniform[row, 0] < probability[entry]:
            out[row] = _count(
                uniform[row, 1], a[row], t1[law], t2[law], log_sum[entry], logs
            )
        else:
            out[row] = 0


@kernel
def choose_in_turn(uniform, first_draw, a, wanted, first_site, chosen):
    """Choose `wanted` of `a` sites for every pair, every subset equally likely.

    Each site in turn is taken with the chance (still wanted) / (still to come).
    """
    for row in range(a.size):
        left = wanted[row]
        for site in range(a[row]):
            u = uniform[first_draw[row] + site // 4, site % 4]
            if u * (a[row] - site) < left:
                chosen[first_site[row] + site] = True
                left -= 1
