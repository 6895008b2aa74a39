"""The posterior of every pathway's law, averaged over the unknown spreads.

A few dozen points of a Sobol sequence cover the priors of the six spreads; more are
placed where their weights (Laplace evidence) are, and all are weighted together as one
importance sample (deterministic mixture; Owen & Zhou 2000, J Am Stat Assoc 95:135).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import logsumexp
from scipy.stats import multivariate_normal, norm
from scipy.stats.qmc import Sobol

from circuitgen.core.draws import uniforms
from circuitgen.wiring.evidence import Evidence
from circuitgen.wiring.posterior import Mode, draw_about, find_mode, normals_needed
from circuitgen.wiring.prior import SPREAD_SCALES, Design, spreads_of

DRAWS_N = 400
_POINTS_LOG2 = 6
# Rounds of points placed where the weights are, until so many count.
_MOST_ROUNDS = 3
_ENOUGH_POINTS = 16.0
# Fewer effective points than this are too few to speak of an average.
FEW_POINTS = 8.0


@dataclass(frozen=True)
class Posterior:
    """Laws of all pathways: their mean and draws, in (eta, tau, t2).

    Attributes
    ----------
    eta, tau : (pathways,)
        Posterior means.
    bend : (units,)
        Posterior means of t2 of the evidence's pathways.
    eta_draws, tau_draws : (draws, pathways)
    bend_draws : (draws, units)
    points_n : int
        Points over the spreads.
    effective_points : float
        1 / sum of squared weights: how many of them count.
    """

    eta: np.ndarray
    tau: np.ndarray
    bend: np.ndarray
    eta_draws: np.ndarray
    tau_draws: np.ndarray
    bend_draws: np.ndarray
    points_n: int
    effective_points: float


def _sobol_normals(round_n: int) -> np.ndarray:
    """Return normal scores of one round's points of a Sobol sequence, (n, 6)."""
    n = 2**_POINTS_LOG2
    sequence = Sobol(SPREAD_SCALES.size, scramble=False)
    points = sequence.random_base2(_POINTS_LOG2 + 2)[round_n * n : (round_n + 1) * n]
    # Half a cell away from zero, which has no normal score.
    return norm.ppf((points + 0.5 ** (_POINTS_LOG2 + 3)) % 1.0)


def _weights(scores: np.ndarray, modes: list[Mode], proposals) -> np.ndarray:
    """Return importance weights of all points under the mixture of their proposals."""
    log_prior = norm.logpdf(scores).sum(axis=1)
    log_mixture = logsumexp(
        [log_prior, *(p.logpdf(scores) for p in proposals)], axis=0
    ) - np.log(1 + len(proposals))
    log_weight = log_prior - log_mixture + [mode.log_evidence for mode in modes]
    return np.exp(log_weight - logsumexp(log_weight))


def _next_proposal(scores, weights):
    """Return a normal distribution about the weighted points, wider than they are."""
    middle = weights @ scores
    spread = (scores - middle) * np.sqrt(weights)[:, None]
    # With few points that count the covariance is poor: a part of the prior's is added.
    covariance = 1.5 * spread.T @ spread + 0.15 * np.eye(scores.shape[1])
    return multivariate_normal(middle, covariance)


def explore(design: Design, evidence: Evidence) -> tuple[list[Mode], np.ndarray]:
    """Return modes at points over the spreads, and the points' weights."""
    scores = _sobol_normals(0)
    start = np.zeros(3 * evidence.pathways.size)
    modes: list[Mode] = []
    proposals: list = []

    def visit(some):
        for score in some:
            mode = find_mode(design, evidence, spreads_of(score), start)
            modes.append(mode)

    visit(scores)
    weights = _weights(scores, modes, proposals)
    for round_n in range(1, _MOST_ROUNDS + 1):
        proposal = _next_proposal(scores, weights)
        root = np.linalg.cholesky(proposal.cov)
        fresh = proposal.mean + _sobol_normals(round_n) @ root.T
        proposals.append(proposal)
        scores = np.concatenate([scores, fresh])
        visit(fresh)
        weights = _weights(scores, modes, proposals)
        if _effective(weights) >= _ENOUGH_POINTS:
            break
    return modes, weights


def _effective(weights: np.ndarray) -> float:
    """Return how many points count: 1 / sum of squared weights."""
    return float(1.0 / (weights**2).sum())


def _shares(weights: np.ndarray, draws_n: int) -> np.ndarray:
    """Return the number of draws about each point: systematic resampling."""
    edges = np.concatenate([[0.0], np.cumsum(weights)])
    return np.diff(np.floor(edges / edges[-1] * draws_n + 0.5)).astype(int)


def _normals(seed: int, first: int, draws_n: int, needed: int) -> np.ndarray:
    blocks = -(-needed // 4)
    draw = np.repeat(np.arange(first, first + draws_n), blocks)
    block = np.tile(np.arange(blocks), draws_n)
    uniform = uniforms(seed, "laws", draw, index=block).reshape(draws_n, -1)
    return norm.ppf(uniform[:, :needed] + 2.0**-54)


def pool(
    design: Design, evidence: Evidence, seed: int, draws_n: int = DRAWS_N
) -> Posterior:
    """Return the posterior of all pathways' laws given the evidence.

    The draws are keyed by the seed: draw k is the same in every run of the same data.
    """
    modes, weights = explore(design, evidence)
    return _average(design, evidence, modes, weights, seed, draws_n)


def _average(design, evidence, modes, weights, seed, draws_n) -> Posterior:
    needed = normals_needed(design, evidence)
    parts, first = [], 0
    for mode, count in zip(modes, _shares(weights, draws_n), strict=True):
        if count:
            normals = _normals(seed, first, int(count), needed)
            parts.append(draw_about(mode, design, evidence, normals))
            first += int(count)
    eta, tau, bend = (np.concatenate(part) for part in zip(*parts, strict=True))
    # The points come in order of the sequence: shuffle, so that the first few draws
    # are no worse a sample than all of them.
    order = np.argsort(uniforms(seed, "order of laws", np.arange(draws_n))[:, 0])
    return Posterior(
        eta=weights @ np.array([mode.eta for mode in modes]),
        tau=weights @ np.array([mode.tau for mode in modes]),
        bend=weights @ np.array([mode.bend for mode in modes]),
        eta_draws=eta[order],
        tau_draws=tau[order],
        bend_draws=bend[order],
        points_n=len(modes),
        effective_points=_effective(weights),
    )
