"""The laws of all pathways of a circuit, and what became of every recording."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class RowFit:
    """What the laws give for one recording, over the pairs that it could have drawn.

    Attributes
    ----------
    probability, synapses_mean, synapses_sd : float
        NaN where the circuit has no such pair; mean and spread also where none touches.
    feasible : bool
        False when the circuit cannot give what was measured.
    note : str
        Why not, and whatever else a reader must know; empty when all is plain.
    """

    probability: float
    synapses_mean: float
    synapses_sd: float
    feasible: bool
    note: str


@dataclass(frozen=True)
class PathwayLaws:
    """One law for every ordered pair of cell types.

    Arrays have shape (types_n, types_n), presynaptic type first.

    Attributes
    ----------
    t0, t1, t2 : float64
        The law of `circuitgen.wiring.law`; t0 may be infinite.
    t0_low, t0_high : float64
        t0 at the ends of the 95 % interval of the recorded counts; NaN for pathways
        that nobody recorded and for probabilities without counts.
    recorded : bool
        Whether a recording of the pathway, or of groups it belongs to, gave its
        probability.
    p_ceiling : float64
        Share of all pairs with an apposition: no law connects more. NaN without pairs.
    basis : str
        What the law rests on, in words.
    rows : tuple of RowFit
        One for each recording, in their order.
    """

    t0: np.ndarray
    t1: np.ndarray
    t2: np.ndarray
    t0_low: np.ndarray
    t0_high: np.ndarray
    recorded: np.ndarray
    p_ceiling: np.ndarray
    basis: np.ndarray
    rows: tuple[RowFit, ...]
