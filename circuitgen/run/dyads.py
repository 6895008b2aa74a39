"""Both directions of a pair: appositions one way and the other."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace

import numpy as np

from circuitgen.run.circuit import Circuit, soma_offsets
from circuitgen.run.pair_counter import PairCounter
from circuitgen.run.protocol import Protocol


class Dyads:
    """The touching pairs of those types whose reciprocals somebody counted."""

    def __init__(
        self,
        circuit: Circuit,
        protocols: Sequence[Protocol],
        blocks: Iterable[tuple[np.ndarray, np.ndarray, np.ndarray]],
    ):
        self._circuit = circuit
        self._types_n = len(circuit.spec.cell_types)
        self.wanted = np.zeros((self._types_n, self._types_n), bool)
        for protocol in protocols:
            for place in (
                np.ix_(protocol.pre_types, protocol.post_types),
                np.ix_(protocol.post_types, protocol.pre_types),
            ):
                self.wanted[place] = True
        parts = [self._chosen(*block) for block in blocks] if protocols else []
        empty = (np.zeros(0, np.int32),) * 3
        columns = zip(*parts, strict=True) if parts else ((part,) for part in empty)
        self._pre, self._post, self._count = (np.concatenate(part) for part in columns)
        # Blocks and pairs within them are in order, so that the keys are, too.
        self._keys = self._key(self._pre, self._post)

    def _chosen(self, pre, post, count):
        types = self._circuit.cells.type_index
        chosen = self.wanted[types[pre], types[post]] & (pre != post)
        return pre[chosen], post[chosen], count[chosen]

    def _key(self, pre, post) -> np.ndarray:
        return pre.astype(np.int64) * self._circuit.cells.cells_n + post

    def appositions(self, pre: np.ndarray, post: np.ndarray) -> np.ndarray:
        """Return the appositions of ordered pairs of the wanted types; 0 where none."""
        if not self._keys.size:
            return np.zeros(len(pre), np.int32)
        key = self._key(pre, post)
        place = np.minimum(np.searchsorted(self._keys, key), self._keys.size - 1)
        return np.where(self._keys[place] == key, self._count[place], 0)

    def unordered(self, protocol: Protocol, pre, post) -> np.ndarray:
        """Tell which ordered pairs stand for an unordered pair of a protocol.

        Where both directions belong to it, that from the lower cell id does.
        """
        types, n = self._circuit.cells.type_index, self._types_n
        inside = np.zeros((n, n), bool)
        inside[np.ix_(protocol.pre_types, protocol.post_types)] = True
        there, back = inside[types[pre], types[post]], inside[types[post], types[pre]]
        chosen = there & (~back | (pre < post))
        offsets = soma_offsets(self._circuit, pre, post)
        if protocol.lateral:
            offsets = offsets[:, :2]
        return chosen & protocol.holds(np.linalg.norm(offsets, axis=1))

    def histograms(self, protocol: Protocol) -> dict[tuple[int, int], np.ndarray]:
        """Return unordered pairs that touch, by appositions of one way and the other."""
        there = np.flatnonzero(self.unordered(protocol, self._pre, self._post))
        back = np.flatnonzero(self.unordered(protocol, self._post, self._pre))
        # Pairs that touch in the reverse direction alone.
        alone = self.appositions(self._post[back], self._pre[back]) == 0
        back = back[alone]
        pre = np.concatenate([self._pre[there], self._post[back]])
        post = np.concatenate([self._post[there], self._pre[back]])
        forth_n = np.concatenate([self._count[there], np.zeros(back.size, np.int64)])
        back_n = self.appositions(post, pre)
        types = self._circuit.cells.type_index
        out = {}
        for a in protocol.pre_types:
            for b in protocol.post_types:
                mine = (types[pre] == a) & (types[post] == b)
                n, m = forth_n[mine].astype(np.int64), back_n[mine].astype(np.int64)
                size = (n.max(initial=0) + 1, m.max(initial=0) + 1)
                code = n * size[1] + m
                out[a, b] = np.bincount(code, minlength=size[0] * size[1]).reshape(size)
        return out

    @staticmethod
    def pairs_n(protocol: Protocol, counter: PairCounter) -> float:
        """Return all unordered pairs in a protocol's window, uncut."""
        total, whole = 0.0, replace(protocol, cut=None)
        for a in protocol.pre_types:
            for b in protocol.post_types:
                twice = a in protocol.post_types and b in protocol.pre_types
                total += counter.count(a, b, whole) * (0.5 if twice else 1.0)
        return float(total)

    def realised(self, protocol: Protocol, pairs_n: float, pre, post) -> float:
        """Return the share of a protocol's unordered pairs that connect both ways.

        `pre` and `post` are the connections of a circuit, in order of the tables.
        """
        chosen = self.unordered(protocol, pre, post)
        keys, back = self._key(pre, post), self._key(post[chosen], pre[chosen])
        place = np.minimum(np.searchsorted(keys, back), max(keys.size - 1, 0))
        both = int((keys[place] == back).sum()) if keys.size else 0
        return both / pairs_n if pairs_n else float("nan")
