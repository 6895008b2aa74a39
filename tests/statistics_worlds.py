"""Made-up worlds with known laws, for checks of the pooled model's intervals.

A world has cell types, pathways with pairs that touch now and then, laws drawn from a
model, and recordings of a share of the pathways. Nothing here is data.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.spec import Recording
from circuitgen.wiring import Law, Window, moments

TYPES_N = 12
# Scales of the half-normals that a world's six spreads are drawn from: by presynaptic
# type, by postsynaptic type and by pathway; of eta, then of t1.
SPREAD_SCALES = (0.7, 0.7, 1.0, 0.4, 0.4, 0.5)
KINDS = ("well specified", "heavy tails", "missing interaction", "overdispersed")


@dataclass(frozen=True)
class World:
    """Histograms, true probabilities and means by pathway, recordings with windows."""

    is_excitatory: list[bool]
    home_layer: list[int]
    histograms: dict[tuple[int, int], np.ndarray]
    true_p: dict[tuple[int, int], float]
    true_mean: dict[tuple[int, int], float]
    windows: list[Window]


def _histogram(random) -> np.ndarray:
    """Pairs by appositions: some never touch, the others follow a Poisson mixture."""
    pairs_n, touching = 2000, random.uniform(0.25, 0.95)
    rate = random.gamma(1.5, random.uniform(0.8, 3.0), size=int(pairs_n * touching))
    return np.bincount(
        np.concatenate([random.poisson(rate), np.zeros(pairs_n - rate.size, int)])
    )


def _deviations(random, kind: str, spread: float) -> np.ndarray:
    """Deviations by pathway: normal, or in Student's t with three degrees of freedom."""
    if kind == "heavy tails":
        return spread * random.standard_t(3, (TYPES_N, TYPES_N)) / np.sqrt(3.0)
    return spread * random.standard_normal((TYPES_N, TYPES_N))


def _laws(random, kind: str, is_excitatory, home):
    """Return eta and t1 by pathway."""
    e = np.array(is_excitatory, float)
    pre, post = e[:, None], e[None, :]
    same = (np.array(home)[:, None] == np.array(home)[None, :]).astype(float)
    eta = (
        random.normal(-0.6, 0.8) - 0.8 * pre + 0.2 * post - 0.3 * pre * post + 0.5 * same
    )
    t1 = random.normal(-0.8, 0.4) - 0.3 * pre + 0.0 * post
    spreads = np.abs(random.standard_normal(6)) * SPREAD_SCALES
    t1 = t1 + np.zeros_like(eta)
    for place, values in ((0, eta), (3, t1)):
        values += spreads[place] * random.standard_normal(TYPES_N)[:, None]
        values += spreads[place + 1] * random.standard_normal(TYPES_N)[None, :]
        values += _deviations(random, kind, spreads[place + 2])
    if kind == "missing interaction":
        score_pre, score_post = random.standard_normal((2, TYPES_N))
        eta += 0.7 * score_pre[:, None] * score_post[None, :]
    return eta, t1


def _recording(random, kind: str, row, names, p, found) -> Recording:
    n = int(np.exp(random.uniform(np.log(10), np.log(150))))
    # Overdispersed: pairs of one slice share a tenth of their variance.
    chance = random.beta(9 * p, 9 * (1 - p)) if kind == "overdispersed" else p
    k = int(random.binomial(n, chance))
    measured = {"tested_n": n, "connected_n": k}
    if k >= 3 and random.random() < 0.6:
        mean = found.mean + found.sd / np.sqrt(k) * random.standard_normal()
        measured |= {
            "synapses_mean": float(max(mean, 1.0)),
            "synapses_pairs_n": k,
        }
    pre, post = names
    return Recording(pre_type=pre, post_type=post, row=row, **measured)


def make_world(seed: int, kind: str = "well specified", share=None) -> World:
    """Return a world; `share` of its pathways are recorded, 0.2 to 0.3 by default."""
    random = np.random.default_rng(seed)
    is_excitatory = [place % 3 != 2 for place in range(TYPES_N)]
    home = [place // 3 for place in range(TYPES_N)]
    eta, t1 = _laws(random, kind, is_excitatory, home)
    share = random.uniform(0.2, 0.3) if share is None else share
    pathways = list(np.ndindex(TYPES_N, TYPES_N))
    chosen = set(
        random.permutation(len(pathways))[: round(share * len(pathways))].tolist()
    )
    histograms, true_p, true_mean, windows = {}, {}, {}, []
    for place, pathway in enumerate(pathways):
        h = _histogram(random)
        x = float(np.log1p(np.exp(t1[pathway])))
        law = Law(float(eta[pathway] - np.log(np.expm1(5 * x))), float(t1[pathway]))
        found = moments(h, law)
        histograms[pathway], true_p[pathway] = h, found.probability
        true_mean[pathway] = found.mean
        if place in chosen:
            names = tuple(f"type_{index}" for index in pathway)
            row = _recording(
                random, kind, len(windows) + 1, names, found.probability, found
            )
            windows.append(Window(row, {pathway: h}))
    return World(is_excitatory, home, histograms, true_p, true_mean, windows)
