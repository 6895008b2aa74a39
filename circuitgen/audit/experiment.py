"""What a recording's protocol would find in a circuit: pairs, connections, clusters."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from circuitgen.audit.circuit import AuditCircuit
from circuitgen.core.draws import uniforms
from circuitgen.run import PairCounter, Protocol, soma_offsets

# Virtual clusters of simultaneously recorded cells that the design effect comes from.
_CLUSTERS = 1500
_SEED = 0


@dataclass(frozen=True)
class Found:
    """A circuit under one protocol.

    Attributes
    ----------
    pairs_n, connected_n : int
        Ordered pairs of different cells in the window, and those connected.
    synapses_mean, synapses_sd : float
        Of these connections; NaN where unknown or none.
    dyads_n, both_n : int
        Unordered pairs, and those connected both ways.
    design_effect : float
        Variance of the connections among pairs of recorded clusters over that of as
        many independent pairs, at least 1.
    """

    pairs_n: int
    connected_n: int
    synapses_mean: float
    synapses_sd: float
    dyads_n: int
    both_n: int
    design_effect: float


def _inside(circuit: AuditCircuit, protocol: Protocol, pre, post) -> np.ndarray:
    """Tell which ordered pairs a protocol samples."""
    n = len(circuit.type_names)
    allowed = np.zeros((n, n), bool)
    allowed[np.ix_(protocol.pre_types, protocol.post_types)] = True
    types = circuit.cells.type_index
    chosen = allowed[types[pre], types[post]] & (pre != post)
    if protocol.low_um == 0.0 and np.isinf(protocol.high_um):
        return chosen
    offsets = soma_offsets(circuit, pre, post)
    offsets = offsets[:, :2] if protocol.lateral else offsets
    return chosen & protocol.holds(np.linalg.norm(offsets, axis=1))


def _pairs_n(circuit: AuditCircuit, counter: PairCounter | None, protocol) -> int:
    """Count the ordered pairs of a protocol; without places all of the types."""
    sizes = np.bincount(circuit.cells.type_index, minlength=len(circuit.type_names))
    total = 0
    for a in protocol.pre_types:
        for b in protocol.post_types:
            if counter is None:
                total += int(sizes[a]) * int(sizes[b]) - (int(sizes[a]) if a == b else 0)
            else:
                total += int(counter.count(a, b, protocol))
    return total


class Experimenter:
    """Runs recordings' protocols on one circuit."""

    def __init__(self, circuit: AuditCircuit):
        self._circuit = circuit
        self._counter = PairCounter(circuit) if circuit.has_positions else None

    def run(self, protocol: Protocol, cluster_size: int | None) -> Found:
        """Return what a protocol would find, tested in clusters or pair by pair."""
        circuit, whole = self._circuit, replace(protocol, cut=None)
        rows = np.flatnonzero(_inside(circuit, whole, circuit.pre, circuit.post))
        mean = sd = np.nan
        if circuit.synapses_n is not None and rows.size:
            numbers = circuit.synapses_n[rows]
            mean, sd = float(numbers.mean()), float(numbers.std())
        pre, post = circuit.pre[rows], circuit.post[rows]
        types = circuit.cells.type_index
        both_types = np.isin(types, protocol.pre_types) & np.isin(
            types, protocol.post_types
        )
        # Where both directions belong to the protocol, the one from the lower id counts.
        doubled = both_types[pre] & both_types[post]
        first = ~doubled | (pre < post)
        both = circuit.connected(post[first], pre[first])
        return Found(
            _pairs_n(circuit, self._counter, whole),
            rows.size,
            mean,
            sd,
            self._dyads_n(whole, both_types),
            int(both.sum()),
            self._design_effect(whole, cluster_size),
        )

    def _dyads_n(self, protocol: Protocol, both_types: np.ndarray) -> int:
        total = _pairs_n(self._circuit, self._counter, protocol)
        shared = tuple(set(protocol.pre_types) & set(protocol.post_types))
        if not shared:
            return total
        within = replace(protocol, pre_types=shared, post_types=shared)
        return total - _pairs_n(self._circuit, self._counter, within) // 2

    def _design_effect(self, protocol: Protocol, size: int | None) -> float:
        """Draw virtual clusters and compare their counts with independent pairs."""
        if size is None:
            return 1.0
        circuit = self._circuit
        types = circuit.cells.type_index
        wanted = np.union1d(protocol.pre_types, protocol.post_types)
        candidates = np.flatnonzero(np.isin(types, wanted))
        if candidates.size < size:
            return 1.0
        cluster, pre, post = _draw_clusters(circuit, protocol, candidates, size)
        inside = _inside(circuit, protocol, pre, post)
        cluster, pre, post = cluster[inside], pre[inside], post[inside]
        if not cluster.size:
            return 1.0
        seen = circuit.connected(pre, post)
        p = seen.mean()
        if p in (0.0, 1.0):
            return 1.0
        excess = np.bincount(cluster, seen - p)
        return max(float((excess**2).sum() / (cluster.size * p * (1 - p))), 1.0)


def _draw_clusters(circuit: AuditCircuit, protocol: Protocol, candidates, size: int):
    """Draw cells near a first one, and list all ordered pairs within each cluster."""
    index = np.arange(_CLUSTERS)
    row = protocol.row
    first = uniforms(_SEED, "audit clusters", index, row)[:, 0]
    first = candidates[(first * candidates.size).astype(int)]
    clusters = []
    for number, cell in enumerate(first):
        near = candidates
        if np.isfinite(protocol.high_um):
            offsets = soma_offsets(circuit, np.full(candidates.size, cell), candidates)
            offsets = offsets[:, :2] if protocol.lateral else offsets
            near = candidates[np.linalg.norm(offsets, axis=1) <= protocol.high_um]
        near = near[near != cell]
        order = uniforms(_SEED, "audit members", number, row, near)[:, 0]
        clusters.append(np.append(near[np.argsort(order)[: size - 1]], cell))
    number = np.repeat(np.arange(len(clusters)), [part.size**2 for part in clusters])
    pre = np.concatenate([np.repeat(part, part.size) for part in clusters])
    post = np.concatenate([np.tile(part, part.size) for part in clusters])
    return number, pre, post
