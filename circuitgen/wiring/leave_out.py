"""What the other recordings say of a recorded pathway: the cavity approximation.

At every point over the spreads the observations of a pathway are taken out of the
linear equations of the mode; the point's weight is divided by how well it predicts
what was taken out (Vehtari, Gelman & Gabry 2017, Stat Comput 27:1413, section 2, for
the idea of reweighting; here between points, each of which leaves the data out exactly
up to the linearisation).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.stats import binom, norm

from circuitgen.core.draws import uniforms
from circuitgen.wiring.evidence import Evidence
from circuitgen.wiring.gathering import gather, in_order, is_usable, never_connects
from circuitgen.wiring.laws import Laws, Shown, laws_of, show
from circuitgen.wiring.pooling import explore
from circuitgen.wiring.posterior import Mode
from circuitgen.wiring.prior import Design, make_design
from circuitgen.wiring.window import BoutonTotal, Window

_DRAWS = 32
# Points over the spreads that weigh less than this in all are passed over.
_IDLE_WEIGHT = 1e-3


@dataclass(frozen=True)
class LeftOut:
    """Predictions for recordings of the same types from all other recordings.

    Attributes
    ----------
    windows : list of Window
        The recordings left out together.
    shown : list of Shown
        What draws from the posterior without them show under each one's protocol.
    weight : (draws,)
        Weights of the draws; they add up to 1.
    """

    windows: list[Window]
    shown: list[Shown]
    weight: np.ndarray


@dataclass(frozen=True)
class _Point:
    """One point over the spreads, ready for any observations to be taken out."""

    mode: Mode
    spread: np.ndarray
    system: np.ndarray
    weight: float


def _make_point(mode: Mode, weight) -> _Point:
    spread = mode.space.spread(mode.slope.T.toarray())
    system = mode.space.system(mode.slope, mode.noise)
    return _Point(mode, spread, system, float(weight))


def _cavity_draws(point: _Point, keep: np.ndarray, places: np.ndarray, normals):
    """Draw the (eta, tau, t2) of some units given the observations that are kept."""
    mode, space = point.mode, point.mode.space
    own = np.zeros((space.mean.size, places.size))
    own[places, np.arange(places.size)] = 1.0
    covariance = space.spread(own)[places]
    cross = point.spread[places][:, keep]
    gain = np.linalg.solve(point.system[np.ix_(keep, keep)], cross.T).T
    missing = mode.missing + mode.slope @ (mode.place - space.mean)
    mean = space.mean[places] + gain @ missing[keep]
    covariance = covariance - gain @ cross.T
    values, vectors = np.linalg.eigh((covariance + covariance.T) / 2)
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    return mean + normals[:, : places.size] @ root.T


def _laws_of_units(draws, units, evidence: Evidence, pathways_n: int) -> Laws:
    """Turn draws (n, 3 x units) into laws; other pathways are left at 0."""
    eta, tau, bend = np.split(draws, 3, axis=1)
    middle = evidence.middle[units]
    found = laws_of(eta, tau, bend * evidence.bent[units], middle)
    full = np.zeros((3, draws.shape[0], pathways_n))
    full[:, :, evidence.pathways[units]] = found.t0, found.t1, found.t2
    return Laws(*full)


def _log_likelihood(window: Window, shown: Shown) -> np.ndarray:
    """Log likelihood of a recording's counts and mean under every draw."""
    recording, total = window.recording, np.zeros(shown.probability.size)
    if recording.tested_n is not None:
        p = np.clip(shown.probability, 1e-12, 1 - 1e-12)
        total += binom.logpmf(recording.connected_n, recording.tested_n, p)
    if recording.synapses_mean is not None and recording.synapses_pairs_n:
        sd = shown.sd if recording.synapses_sd is None else recording.synapses_sd
        error = np.sqrt((np.nan_to_num(sd) ** 2 + 0.5) / recording.synapses_pairs_n)
        total += norm.logpdf(recording.synapses_mean, np.nan_to_num(shown.mean), error)
    return total


def leave_out(
    is_excitatory: Sequence[bool],
    home_layer: Sequence[int],
    windows: Sequence[Window],
    totals: Sequence[BoutonTotal] = (),
    *,
    seed: int = 0,
) -> list[LeftOut]:
    """Predict the recordings of every pair of types from all the others.

    Recordings that name the same two types or groups are left out together.
    """
    design = make_design(is_excitatory, home_layer)
    types_n = len(is_excitatory)
    used = [w for w in in_order(windows) if is_usable(w) and not never_connects(w)]
    evidence = gather(used, totals, types_n)
    modes, weights = explore(design, evidence)
    points = [
        _make_point(mode, weight)
        for mode, weight in zip(modes, weights, strict=True)
        if weight > _IDLE_WEIGHT / len(modes)
    ]
    groups: dict[tuple[str, str], list[int]] = {}
    for place, window in enumerate(used):
        if window.recording.tested_n is not None:
            names = (window.recording.pre_type, window.recording.post_type)
            groups.setdefault(names, []).append(place)
    return [
        _leave(design, evidence, points, used, rows, seed) for rows in groups.values()
    ]


def _leave(
    design: Design, evidence: Evidence, points, windows, rows, seed: int
) -> LeftOut:
    """Take the observations of some rows out at every point, and draw."""
    keep = np.flatnonzero(~np.isin(evidence.rows, rows))
    mine = np.isin(evidence.entries.row, rows)
    units = np.unique(evidence.entries.unit[mine])
    places = np.concatenate([units + kind * evidence.pathways.size for kind in range(3)])
    blocks = -(-places.size // 4)
    draws, log_likelihoods = [], []
    for number, point in enumerate(points):
        ids = np.repeat(np.arange(_DRAWS), blocks)
        uniform = uniforms(
            seed, "left out", number, ids, 0, np.tile(np.arange(blocks), _DRAWS)
        )
        normals = norm.ppf(uniform.reshape(_DRAWS, -1) + 2.0**-54)
        draws.append(_cavity_draws(point, keep, places, normals))
    laws = _laws_of_units(np.concatenate(draws), units, evidence, design.pathways_n)
    left = [windows[row] for row in rows]
    shown = [
        show(
            laws,
            {pre * design.types_n + post: h for (pre, post), h in w.histograms.items()},
        )
        for w in left
    ]
    log_likelihoods = sum(map(_log_likelihood, left, shown))
    by_point = np.exp(log_likelihoods.reshape(len(points), _DRAWS)).mean(axis=1)
    weight = np.array([point.weight for point in points]) / np.maximum(by_point, 1e-12)
    weight = np.repeat(weight / weight.sum(), _DRAWS) / _DRAWS
    return LeftOut(left, shown, weight)
