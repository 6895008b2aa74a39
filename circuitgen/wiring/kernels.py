"""Compiled draws of synapse numbers and of the appositions that carry them."""

from __future__ import annotations

import numpy as np

from circuitgen.core.compilation import kernel


@kernel
def draw_counts(uniform, appositions, pathway, chance, ways, t1, t2, out):
    """Draw the synapses of every pair into `out`.

    uniform (n, 4): column 0 decides connection, column 1 the number given connection.
    chance (n,): of connection. ways (pathways, most + 1): S_a by appositions.
    """
    for i in range(appositions.size):
        a, k = appositions[i], pathway[i]
        if uniform[i, 0] >= chance[i]:
            out[i] = 0
            continue
        # Logarithms all along: the first terms may be too small for a double.
        log_share = np.log(float(a)) + t1[k] + t2[k] - ways[k, a]
        below, s = np.exp(log_share), 1
        while s < a and uniform[i, 1] >= below:
            log_share += np.log((a - s) / (s + 1.0)) + t1[k] + t2[k] * (2 * s + 1)
            below += np.exp(log_share)
            s += 1
        out[i] = s


@kernel
def choose(uniform, appositions, synapses, out):
    """Mark which sites of every pair carry a synapse, all subsets equally likely.

    uniform (sites,): one number for every site. Selection sampling (Fan, Muller &
    Rezucha 1962, J Am Stat Assoc 57:387): a site is taken with probability
    still needed / still left.
    """
    site = 0
    for i in range(appositions.size):
        need, left = synapses[i], appositions[i]
        for _ in range(appositions[i]):
            if uniform[site] * left < need:
                out[site] = True
                need -= 1
            left -= 1
            site += 1
