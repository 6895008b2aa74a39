"""Pairs by the distance of their somata in space, for curves of probability."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.run.pair_counter import PairCounter
from circuitgen.run.protocol import Protocol

BIN_EDGES_UM = tuple(float(edge) for edge in range(0, 301, 25))


@dataclass(frozen=True)
class DistanceBins:
    """Histograms of appositions by pathway, a list of one for each bin."""

    histograms: dict[tuple[int, int], list[np.ndarray]]


class DistanceTally:
    """Counts touching pairs by pathway, bin of distance and appositions."""

    def __init__(self, types_n: int):
        self._pathways_n, self._bins_n = types_n**2, len(BIN_EDGES_UM) - 1
        self._types_n = types_n
        self._counts = np.zeros((self._pathways_n, self._bins_n, 1), np.int64)

    def add(self, pathway, distance_um, appositions) -> None:
        """Count the touching pairs of a block."""
        place = np.searchsorted(BIN_EDGES_UM, distance_um, side="left") - 1
        # The first bin holds its lower edge too.
        place = np.maximum(place, 0)
        inside = place < self._bins_n
        pathway, place = pathway[inside], place[inside]
        appositions = appositions[inside]
        size = max(self._counts.shape[2], int(appositions.max(initial=0)) + 1)
        more = size - self._counts.shape[2]
        self._counts = np.pad(self._counts, ((0, 0), (0, 0), (0, more)))
        code = (pathway * self._bins_n + place) * size + appositions
        found = np.bincount(code, minlength=self._counts.size)
        self._counts += found.reshape(self._counts.shape)

    def bins(self, counter: PairCounter) -> DistanceBins:
        """Return the histograms, pairs without apposition included."""
        everyone = tuple(range(self._types_n))
        out: dict[tuple[int, int], list[np.ndarray]] = {}
        for pre in everyone:
            for post in everyone:
                within = [
                    counter.count(pre, post, Protocol((pre,), (post,), 0.0, edge, False))
                    if edge > 0
                    else 0
                    for edge in BIN_EDGES_UM
                ]
                found = self._counts[pre * self._types_n + post].copy()
                found[:, 0] = np.maximum(np.diff(within) - found.sum(axis=1), 0)
                out[pre, post] = [trimmed(row) for row in found]
        return DistanceBins(out)


def trimmed(histogram: np.ndarray) -> np.ndarray:
    """Return a histogram without its empty end."""
    return histogram[: int(np.flatnonzero(histogram).max(initial=0)) + 1]
