"""Which pairs each recording could have sampled, by their number of appositions."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.appositions import (
    Appositions,
    kept_sites,
    make_paths,
    pair_weight,
    place_slices,
)
from circuitgen.run.circuit import Circuit, soma_offsets
from circuitgen.run.distances import DistanceBins, DistanceTally
from circuitgen.run.dyads import Dyads
from circuitgen.run.pair_counter import PairCounter
from circuitgen.run.protocol import (
    REFERENCE_HIGH_UM,
    Protocol,
    protocol_of,
    within,
)
from circuitgen.run.sites import SiteStore
from circuitgen.wiring import Window


class PairBlock:
    """The touching pairs of different cells of one block, sorted by pathway."""

    def __init__(self, circuit: Circuit, pre, post, appositions):
        pathway = circuit.pathway(pre, post)
        pathway[pre == post] = -1
        order = np.argsort(pathway.astype(np.int32), kind="stable")
        self.order = order[np.searchsorted(pathway[order], 0) :]
        self.pre, self.post = pre[self.order], post[self.order]
        self.pathway, self.appositions = pathway[self.order], appositions[self.order]
        self.offsets = soma_offsets(circuit, self.pre, self.post)
        self.lateral_um = np.linalg.norm(self.offsets[:, :2], axis=1)
        self.distance_um = np.linalg.norm(self.offsets, axis=1)
        self._types_n = len(circuit.spec.cell_types)
        self._bounds = np.searchsorted(self.pathway, np.arange(self._types_n**2 + 1))

    def selected(self, protocol: Protocol) -> np.ndarray:
        """Return the rows that a protocol samples."""
        distance = self.lateral_um if protocol.lateral else self.distance_um
        parts = [
            begin + np.flatnonzero(protocol.holds(distance[begin:end]))
            for begin, end in (
                self._bounds[code : code + 2]
                for code in protocol.pathways(self._types_n)
            )
            if end > begin
        ]
        return np.concatenate(parts) if parts else np.zeros(0, np.int64)


class Tally:
    """Histograms of appositions by pathway under one protocol, block after block.

    `counts` (pathway, a, lost); nothing is lost without a slice.
    """

    def __init__(self, circuit: Circuit, protocol: Protocol):
        self.protocol = protocol
        self._types_n = len(circuit.spec.cell_types)
        self._codes = protocol.pathways(self._types_n)
        self.counts = np.zeros((self._codes.size, 1, 1))
        # Chances of the touching pairs: placements only estimate them.
        self._touching = np.zeros(self._codes.size)

    def add(self, pathway, appositions) -> None:
        """Count touching pairs."""
        self._grow(int(appositions.max(initial=0)) + 1, 1)
        code, a_size = np.searchsorted(self._codes, pathway), self.counts.shape[1]
        found = np.bincount(code * a_size + appositions, minlength=self.counts.size)
        self.counts[:, :, 0] += found.reshape(-1, a_size)
        self._touching += np.bincount(code, minlength=self._codes.size)

    def add_cut(self, pathway, appositions, kept, weight, chance) -> None:
        """Count placements of slices around touching pairs, (pairs, placements)."""
        lost = appositions[:, None] - kept
        self._grow(int(appositions.max(initial=0)) + 1, int(lost.max(initial=0)) + 1)
        _, a_size, lost_size = self.counts.shape
        code = np.searchsorted(self._codes, pathway)
        place = (code * a_size + appositions)[:, None] * lost_size + lost
        found = np.bincount(
            place.reshape(-1), weight.reshape(-1), minlength=self.counts.size
        )
        self.counts += found.reshape(self.counts.shape)
        self._touching += np.bincount(code, chance, minlength=self._codes.size)

    def _grow(self, a_size: int, lost_size: int) -> None:
        _, a_now, lost_now = self.counts.shape
        more = (max(a_size - a_now, 0), max(lost_size - lost_now, 0))
        if any(more):
            self.counts = np.pad(self.counts, ((0, 0), (0, more[0]), (0, more[1])))

    def histograms(self, counter: PairCounter) -> dict[tuple[int, int], np.ndarray]:
        """Return the histogram of every pathway, pairs without apposition included."""
        out = {}
        for place, code in enumerate(self._codes.tolist()):
            pre, post = divmod(code, self._types_n)
            found = self.counts[place]
            most = int(np.flatnonzero(found.any(axis=1)).max(initial=0))
            histogram = found[: most + 1].copy()
            if self.protocol.cut is not None and histogram.any():
                # Placements only estimate the chance of the pairs, which is known.
                histogram *= self._touching[place] / histogram.sum()
            total = counter.count(pre, post, self.protocol)
            # Autapses touch but are no pair of different cells.
            histogram[0, 0] = max(total - self._touching[place], 0.0)
            if self.protocol.cut is None:
                out[pre, post] = np.rint(histogram[:, 0]).astype(np.int64)
            else:
                out[pre, post] = histogram[:, : most + 1]
        return out


class SliceLoss:
    """Counts which appositions of pairs the slices placed around them keep."""

    def __init__(self, circuit: Circuit):
        self._circuit, self._paths = circuit, make_paths(circuit.arbors)

    def placed(self, protocol: Protocol, pre, post, offsets, first, sites):
        """Return sites kept and weights, (pairs, placements) each."""
        cells = self._circuit.cells
        placed = place_slices(
            self._circuit.spec.seed,
            protocol.cut,
            pre,
            post,
            offsets,
            protocol.placements_n,
            protocol.row,
        )
        sides = [(cells.arbor_index[c], cells.azimuth_deg[c]) for c in (pre, post)]
        kept = kept_sites(
            self._paths, protocol.cut, placed, sides, first, sites, offsets
        )
        return kept, placed.weight

    def lose(self, block: PairBlock, sites: Appositions, tally: Tally) -> None:
        """Add a block's pairs to a tally under its slice."""
        protocol = tally.protocol
        rows = block.selected(protocol)
        first, chosen = gather_sites(sites, block.order[rows])
        kept, weight = self.placed(
            protocol,
            block.pre[rows],
            block.post[rows],
            block.offsets[rows],
            first,
            chosen,
        )
        chance = pair_weight(block.lateral_um[rows], protocol.cut)
        tally.add_cut(block.pathway[rows], block.appositions[rows], kept, weight, chance)


def gather_sites(sites: Appositions, pairs: np.ndarray):
    """Return where the sites of some pairs begin, and the sites, pair after pair."""
    count = sites.count[pairs]
    first = np.concatenate([[0], np.cumsum(count)])
    index = np.arange(first[-1]) - np.repeat(first[:-1], count)
    index += np.repeat(sites.first[pairs], count)
    return first, (
        sites.pre_segment[index],
        sites.pre_fraction[index].astype(float),
        sites.post_segment[index],
        sites.post_fraction[index].astype(float),
    )


@dataclass(frozen=True)
class Histograms:
    """Histograms by pathway: of all pairs, of the reference window, of every row.

    `bins` are by distance, `protocols` those of the rows, in order.
    """

    everything: dict[tuple[int, int], np.ndarray]
    reference: dict[tuple[int, int], np.ndarray]
    bins: DistanceBins
    windows: tuple[Window, ...]
    protocols: tuple[Protocol, ...]
    dyads: Dyads


def take_histograms(circuit: Circuit, store: SiteStore, progress) -> Histograms:
    """Go once through the touching pairs of all blocks."""
    recordings, counter = circuit.spec.recordings, PairCounter(circuit)
    rows = [counter.with_placements(protocol_of(circuit, r)) for r in recordings]
    protocols = [within(circuit, np.inf), within(circuit, REFERENCE_HIGH_UM), *rows]
    tallies = [Tally(circuit, protocol) for protocol in protocols]
    cut = [tally for tally in tallies if tally.protocol.cut is not None]
    loss = SliceLoss(circuit) if cut else None
    distances = DistanceTally(len(circuit.spec.cell_types))
    for number in range(len(store.bounds)):
        sites = store.load(number) if cut else None
        pre, post, count = store.pairs_of(number)
        block = PairBlock(circuit, pre, post, count)
        for tally in tallies:
            if tally.protocol.cut is not None:
                loss.lose(block, sites, tally)
            else:
                chosen = block.selected(tally.protocol)
                tally.add(block.pathway[chosen], block.appositions[chosen])
        distances.add(block.pathway, block.distance_um, block.appositions)
        progress.advance()
    everything, reference, *by_row = [tally.histograms(counter) for tally in tallies]
    counted = [
        protocol
        for protocol, recording in zip(rows, recordings, strict=True)
        if recording.reciprocal_tested_n is not None
    ]
    blocks = (store.pairs_of(number) for number in range(len(store.bounds)))
    dyads = Dyads(circuit, counted, blocks)
    windows = []
    for recording, protocol, histograms in zip(recordings, rows, by_row, strict=True):
        both, pairs_n = {}, 0.0
        if recording.reciprocal_tested_n is not None:
            both = dyads.histograms(protocol)
            pairs_n = dyads.pairs_n(protocol, counter)
        windows.append(Window(recording, histograms, both, pairs_n))
    bins = distances.bins(counter)
    return Histograms(everything, reference, bins, tuple(windows), tuple(rows), dyads)
