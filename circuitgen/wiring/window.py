"""A recording together with the pairs that its protocol could have sampled."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from circuitgen.spec import Recording

Pathway = tuple[int, int]


@dataclass(frozen=True)
class Window:
    """A recording and the pairs that it could have sampled.

    Attributes
    ----------
    recording : Recording
    histograms : mapping of (pre type, post type) to array
        Ordered pairs under the protocol by number of appositions, from 0. With two
        axes the second counts the appositions that the protocol loses: in a slice,
        those whose path to a soma is cut.
    dyads : mapping of (pre type, post type) to int array (a + 1, b + 1)
        For rows with reciprocal counts: unordered pairs that touch, by appositions one
        way and the other.
    dyads_n : float
        All unordered pairs under the protocol.
    """

    recording: Recording
    histograms: Mapping[Pathway, np.ndarray]
    dyads: Mapping[Pathway, np.ndarray] = field(default_factory=dict)
    dyads_n: float = 0.0

    @property
    def pathways(self) -> tuple[Pathway, ...]:
        """The pathways that the row pools."""
        return tuple(self.histograms)

    @property
    def pairs_n(self) -> float:
        """Ordered pairs under the protocol."""
        return float(sum(h.sum() for h in self.histograms.values()))

    @property
    def is_cut(self) -> bool:
        """Whether the protocol may lose appositions."""
        return any(h.ndim == 2 for h in self.histograms.values())

    def histogram(self, pathways: Sequence[Pathway] | None = None) -> np.ndarray:
        """Sum of the histograms of some pathways, all by default; by appositions."""
        chosen = self.pathways if pathways is None else pathways
        parts = [by_appositions(self.histograms[pathway]) for pathway in chosen]
        out = np.zeros(max((part.size for part in parts), default=1))
        for part in parts:
            out[: part.size] += part
        return out

    def ceiling(self) -> float:
        """Share of pairs that can be seen connected: those that keep an apposition."""
        total = self.pairs_n
        kept = sum(kept_pairs(h) for h in self.histograms.values())
        return kept / total if total else 0.0


@dataclass(frozen=True)
class BoutonTotal:
    """Synapses per length of axon that a cell type is known to make.

    `histograms` are those of all pairs of the circuit, `axon_um` the axon of all
    cells of the type inside the volume.
    """

    pre_type: int
    mean_per_um: float
    sd_per_um: float
    axon_um: float
    histograms: Mapping[Pathway, np.ndarray]


def by_appositions(histogram: np.ndarray) -> np.ndarray:
    """Return a histogram without the axis of lost appositions."""
    return histogram.sum(axis=1) if histogram.ndim == 2 else histogram


def kept_pairs(histogram: np.ndarray) -> float:
    """Return how many pairs keep at least one apposition."""
    total = float(histogram.sum())
    if histogram.ndim == 1:
        return total - float(histogram[0])
    return total - float(np.trace(histogram))


def entries_of(histogram: np.ndarray):
    """Return appositions, lost ones and weight of all pairs with an apposition."""
    if histogram.ndim == 2:
        a, lost = np.nonzero(histogram)
        weight = histogram[a, lost]
    else:
        a = np.flatnonzero(histogram)
        lost, weight = np.zeros_like(a), histogram[a]
    some = a > 0
    return a[some], lost[some], weight[some].astype(float)
