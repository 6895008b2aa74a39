"""Which pairs each recording could have sampled, by their number of appositions."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from scipy.spatial import cKDTree

from circuitgen.run.circuit import Circuit, soma_offsets
from circuitgen.spec import Recording
from circuitgen.wiring import Window

# Pathways without a recording of their own report their probability for somata within
# this distance: common practice in paired recordings.
REFERENCE_HIGH_UM = 100.0


@dataclass(frozen=True)
class Protocol:
    """Which ordered pairs of cells a recording samples; distances in micrometres."""

    pre_types: tuple[int, ...]
    post_types: tuple[int, ...]
    low_um: float
    high_um: float
    lateral: bool

    def selects(self, pathway, offsets, types_n: int) -> np.ndarray:
        """Tell which pairs, by pathway code and soma offset, are sampled."""
        allowed = np.zeros((types_n, types_n), bool)
        allowed[np.ix_(self.pre_types, self.post_types)] = True
        distance = np.linalg.norm(offsets[:, :2] if self.lateral else offsets, axis=1)
        inside = (distance >= self.low_um) & (distance <= self.high_um)
        return allowed.reshape(-1)[pathway] & inside


def protocol_of(circuit: Circuit, recording: Recording) -> Protocol:
    """Return the protocol of a recording."""
    low, high = recording.window_um()
    return Protocol(
        circuit.spec.members(recording.pre_type),
        circuit.spec.members(recording.post_type),
        low,
        high,
        recording.distance_kind == "lateral",
    )


def everything_protocol(circuit: Circuit) -> Protocol:
    """Return the protocol that samples every ordered pair of different cells."""
    everyone = tuple(range(len(circuit.spec.cell_types)))
    return Protocol(everyone, everyone, 0.0, np.inf, False)


def reference_protocol(circuit: Circuit) -> Protocol:
    """Return the protocol that pathways without a recording are reported under."""
    everyone = tuple(range(len(circuit.spec.cell_types)))
    return Protocol(everyone, everyone, 0.0, REFERENCE_HIGH_UM, False)


class PairCounter:
    """Counts all ordered pairs of two types within a distance, touching or not."""

    def __init__(self, circuit: Circuit):
        self._cells, self._wrap = circuit.cells, circuit.wrap_um
        self._trees: dict[tuple[int, bool], cKDTree] = {}

    def _tree(self, cell_type: int, lateral: bool) -> cKDTree:
        key = (cell_type, lateral)
        if key not in self._trees:
            points = self._cells.position_um[self._cells.type_index == cell_type]
            size = 2 if lateral else 3
            box = None
            if self._wrap[0] > 0:
                box = np.array([*self._wrap, 0.0])[:size]
                points = points.copy()
                points[:, :2] %= self._wrap
                # A tiny negative number comes out of the division as the period.
                points[:, :2][points[:, :2] >= self._wrap] = 0.0
            self._trees[key] = cKDTree(points[:, :size], boxsize=box)
        return self._trees[key]

    def count(self, pre: int, post: int, low_um, high_um, lateral) -> int:
        """Return the number of ordered pairs of different cells within the window."""
        a, b = self._tree(pre, lateral), self._tree(post, lateral)
        if np.isfinite(high_um):
            total = int(a.count_neighbors(b, high_um))
        else:
            total = a.n * b.n
        if low_um > 0:
            return total - int(a.count_neighbors(b, np.nextafter(low_um, 0.0)))
        return total - (a.n if pre == post else 0)


class Tally:
    """Histograms of appositions by pathway under one protocol, block after block."""

    def __init__(self, circuit: Circuit, protocol: Protocol):
        self._circuit, self.protocol = circuit, protocol
        self._types_n = len(circuit.spec.cell_types)
        self._found: dict[tuple[int, int], int] = {}

    def add(self, pathway, offsets, appositions) -> None:
        """Count the touching pairs of a block."""
        chosen = self.protocol.selects(pathway, offsets, self._types_n)
        pathway, appositions = pathway[chosen], appositions[chosen]
        base = int(appositions.max(initial=0)) + 1
        keys, counts = np.unique(pathway * base + appositions, return_counts=True)
        for key, count in zip(keys.tolist(), counts.tolist(), strict=True):
            place = (key // base, key % base)
            self._found[place] = self._found.get(place, 0) + count

    def histograms(self, counter: PairCounter) -> dict[tuple[int, int], np.ndarray]:
        """Return the histogram of every pathway, pairs without apposition included."""
        protocol, n = self.protocol, self._types_n
        window = (protocol.low_um, protocol.high_um, protocol.lateral)
        by_pathway: dict[int, dict[int, int]] = {}
        for (code, a), count in self._found.items():
            by_pathway.setdefault(code, {})[a] = count
        out = {}
        for pre in protocol.pre_types:
            for post in protocol.post_types:
                found = by_pathway.get(pre * n + post, {})
                histogram = np.zeros(max(found, default=0) + 1, np.int64)
                for a, count in found.items():
                    histogram[a] = count
                # Autapses touch but are no pair of different cells.
                pairs_n = counter.count(pre, post, *window)
                histogram[0] = max(pairs_n - histogram.sum(), 0)
                out[pre, post] = histogram
        return out


@dataclass(frozen=True)
class Histograms:
    """Histograms by pathway: of all pairs, of the reference window, of every row."""

    everything: dict[tuple[int, int], np.ndarray]
    reference: dict[tuple[int, int], np.ndarray]
    windows: tuple[Window, ...]


def take_histograms(
    circuit: Circuit, blocks: Iterable[tuple[np.ndarray, np.ndarray, np.ndarray]]
) -> Histograms:
    """Go once through the touching pairs (pre, post, appositions) of all blocks."""
    recordings = circuit.spec.recordings
    protocols = [everything_protocol(circuit), reference_protocol(circuit)]
    protocols += [protocol_of(circuit, recording) for recording in recordings]
    tallies = [Tally(circuit, protocol) for protocol in protocols]
    for pre, post, appositions in blocks:
        others = pre != post
        pre, post, appositions = pre[others], post[others], appositions[others]
        pathway = circuit.pathway(pre, post)
        offsets = soma_offsets(circuit, pre, post)
        for tally in tallies:
            tally.add(pathway, offsets, appositions)
    counter = PairCounter(circuit)
    everything, reference, *rows = [tally.histograms(counter) for tally in tallies]
    windows = tuple(
        Window(recording, histograms)
        for recording, histograms in zip(recordings, rows, strict=True)
    )
    return Histograms(everything, reference, windows)
