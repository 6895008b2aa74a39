"""Laws of all pathways, one set or many draws of them, and what they would show."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from scipy.special import expit

from circuitgen.wiring.law import Law, softplus
from circuitgen.wiring.observation import REFERENCE_APPOSITIONS, ways_and_moments
from circuitgen.wiring.window import entries_of


@dataclass(frozen=True)
class Laws:
    """Exponents t0, t1, t2 of every pathway: float (draws, pathways) each.

    Pathways are numbered presynaptic type x number of types + postsynaptic type.
    t0 = -inf: pairs of the pathway never connect.
    """

    t0: np.ndarray
    t1: np.ndarray
    t2: np.ndarray

    @property
    def draws_n(self) -> int:
        """Number of draws."""
        return self.t0.shape[0]

    def law(self, pathway: int, draw: int = 0) -> Law:
        """Return one draw's law of one pathway."""
        place = (draw, pathway)
        return Law(float(self.t0[place]), float(self.t1[place]), float(self.t2[place]))

    def only(self, draw: int) -> Laws:
        """Return the laws of one draw."""
        return Laws(*(part[draw : draw + 1] for part in (self.t0, self.t1, self.t2)))


def laws_of(eta, tau, t2, middle) -> Laws:
    """Turn (eta, tau, t2), any shape (draws, pathways), into exponents."""
    t1 = tau - 2.0 * t2 * middle
    five = np.full(t1.size, REFERENCE_APPOSITIONS)
    ways, _ = ways_and_moments(five, t1.reshape(-1), t2.reshape(-1))
    return Laws(eta - ways.reshape(t1.shape), t1, t2)


@dataclass(frozen=True)
class Shown:
    """What pooled pairs would show, by draw: (draws,) each.

    Probability of being seen connected; mean and sd of the synapses seen of a
    connection, NaN where nothing connects.
    """

    probability: np.ndarray
    mean: np.ndarray
    sd: np.ndarray


def _pathway_sums(laws: Laws, pathway: int, histogram: np.ndarray) -> np.ndarray:
    """Sum over a pathway's pairs: connected, synapses, their squares (3, draws)."""
    a, lost, weight = entries_of(histogram)
    shape = (laws.draws_n, a.size)
    out = np.zeros((3, laws.draws_n))
    if not a.size:
        return out
    t0, t1, t2 = (
        np.broadcast_to(part[:, pathway, None], shape).reshape(-1)
        for part in (laws.t0, laws.t1, laws.t2)
    )
    many = np.broadcast_to(a, shape).reshape(-1)
    gone = np.broadcast_to(lost, shape).reshape(-1)
    ways, raw = ways_and_moments(many, t1, t2)
    joined = expit(t0 + ways)
    p, kept = joined, 1.0
    both = 1.0
    if lost.any():
        lost_ways, _ = ways_and_moments(gone, t1, t2)
        p = -np.expm1(softplus(t0 + lost_ways) - softplus(t0 + ways))
        kept = (many - gone) / many
        both = kept * np.maximum(many - gone - 1, 0) / np.maximum(many - 1, 1)
    first = joined * kept * raw[0]
    second = joined * both * (raw[1] - raw[0]) + first
    for row, values in enumerate((p, first, second)):
        out[row] = values.reshape(shape) @ weight
    return out


def show(laws: Laws, histograms: Mapping[int, np.ndarray]) -> Shown:
    """Return what pairs pooled over pathways would show under every draw.

    Parameters
    ----------
    laws : Laws
    histograms : mapping of pathway number to array
        Pairs by appositions, or by appositions and lost ones; see `Window`.
    """
    total = float(sum(h.sum() for h in histograms.values()))
    sums = sum(_pathway_sums(laws, code, h) for code, h in histograms.items())
    if not total:
        nothing = np.full(laws.draws_n, np.nan)
        return Shown(nothing, nothing, nothing)
    p = sums[0] / total
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.where(sums[0] > 0, sums[1] / sums[0], np.nan)
        square = np.where(sums[0] > 0, sums[2] / sums[0], np.nan)
    return Shown(p, mean, np.sqrt(np.maximum(square - mean**2, 0.0)))


def connection_table(laws: Laws, pathway: int, most: int) -> np.ndarray:
    """Return P(connected) by draw and appositions 0 .. most, (draws, most + 1)."""
    a = np.arange(most + 1)
    shape = (laws.draws_n, a.size)
    t0, t1, t2 = (
        np.broadcast_to(part[:, pathway, None], shape).reshape(-1)
        for part in (laws.t0, laws.t1, laws.t2)
    )
    ways, _ = ways_and_moments(np.broadcast_to(a, shape).reshape(-1), t1, t2)
    return expit(t0 + ways).reshape(shape)
