"""Slow, readable twins of the wiring room."""

from __future__ import annotations

import itertools

import numpy as np
from scipy import optimize


def count_probabilities(a, t0, t1, t2):
    """P(s | a) for s = 0 .. a by visiting every subset of the appositions."""
    weight = np.zeros(a + 1)
    for subset in itertools.product((0, 1), repeat=a):
        s = sum(subset)
        weight[s] += np.exp(t0 * (s > 0) + t1 * s + t2 * s**2)
    return weight / weight.sum()


def averages_over_pairs(counts, t0, t1, t2):
    """Probability, mean and variance of connections by plain sums over pairs."""
    p = m = m2 = 0.0
    for a, pairs in enumerate(counts):
        distribution = count_probabilities(a, t0, t1, t2)
        for s in range(1, a + 1):
            p += pairs * distribution[s]
            m += pairs * distribution[s] * s
            m2 += pairs * distribution[s] * s**2
    return p / sum(counts), m / p, m2 / p - (m / p) ** 2


def _joint_program(counts):
    """Variables of a linear program: share of all pairs with (a, s), s from 0."""
    share = np.asarray(counts, float) / np.sum(counts)
    cells = [(a, s) for a in range(share.size) for s in range(a + 1)]
    per_a = [[float(cell[0] == a) for cell in cells] for a in range(share.size)]
    s = np.array([cell[1] for cell in cells], float)
    return share, np.array(per_a), s


def linear_extreme(counts, objective, *, probability=None, mean=None, sign=1):
    """Lowest (sign 1) or highest (sign -1) sum of objective(s) under constraints."""
    share, rows, s = _joint_program(counts)
    rows, values = list(rows), list(share)
    if probability is not None:
        rows.append((s > 0).astype(float))
        values.append(probability)
    if mean is not None:
        rows.append(s)
        values.append(probability * mean)
    found = optimize.linprog(
        sign * objective(s), A_eq=np.array(rows), b_eq=values, bounds=(0, None)
    )
    assert found.status == 0, found.message
    return sign * found.fun


def cumulative_count(u, distribution):
    """The smallest s >= 1 whose cumulative probability given connection exceeds u."""
    total = 0.0
    for s, probability in enumerate(distribution):
        total += probability
        if u < total:
            return s
    raise AssertionError("u is not below 1")


def sites_in_turn(uniforms, a, wanted):
    """Selection sampling, one site after the other."""
    chosen, left = [], wanted
    for site in range(a):
        take = uniforms[site] * (a - site) < left
        chosen.append(bool(take))
        left -= take
    return chosen
