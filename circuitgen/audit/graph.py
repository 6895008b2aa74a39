"""Graph facts of a circuit: density, degrees, reciprocity, triads."""

from __future__ import annotations

import numpy as np

from circuitgen.audit.census_kernels import count_common
from circuitgen.audit.circuit import AuditCircuit

# Ties of a dyad seen from its first cell: sends, receives, both; 3 stands for none.
SENDS, RECEIVES, MUTUAL, NULL = range(4)
_MIRROR = (RECEIVES, SENDS, MUTUAL, NULL)
# The classes of Holland & Leinhardt 1970 (Am J Sociol 76:492): mutual, asymmetric and
# null dyads, and a letter where that leaves a choice.
CLASSES = (
    "003", "012", "102", "021D", "021U", "021C", "111D", "111U", "030T", "030C", "201",
    "120D", "120U", "120C", "210", "300",
)  # fmt: skip


def triad_class(ties: tuple[int, int, int]) -> str:
    """Return the class of a triad from its ties a-b, b-c and a-c."""
    counts = [sum(tie == MUTUAL for tie in ties), 0, sum(tie == NULL for tie in ties)]
    counts[1] = 3 - counts[0] - counts[2]
    name = "".join(map(str, counts))
    letters = [known[3:] for known in CLASSES if known.startswith(name)]
    return name if letters == [""] else name + _letter(ties, name)


def _letter(ties: tuple[int, int, int], name: str) -> str:
    """Tell classes of the same dyads apart by the asymmetric ones among them."""
    ab, bc, ac = ties
    arrows = []
    for tie, (x, y) in ((ab, "ab"), (bc, "bc"), (ac, "ac")):
        if tie in (SENDS, RECEIVES):
            arrows.append((x, y) if tie == SENDS else (y, x))
    sent = [arrows_from for arrows_from, _ in arrows]
    got = [arrows_to for _, arrows_to in arrows]
    if name == "111":
        pairs = {ab: "ab", bc: "bc", ac: "ac"}
        mutual = pairs[MUTUAL]
        # D: the arrow ends at the mutual pair; U: it begins there.
        return "D" if got[0] in mutual else "U"
    if name == "030":
        return "C" if len(set(sent)) == 3 else "T"
    if len(set(sent)) == 1:
        return "D"
    return "U" if len(set(got)) == 1 else "C"


def _dyads(circuit: AuditCircuit):
    """Return (first, second, tie) of all connected dyads, first sends or is lower."""
    back = circuit.connected(circuit.post, circuit.pre)
    lower = circuit.pre < circuit.post
    one_way, mutual = ~back, back & lower
    first = np.concatenate([circuit.pre[one_way], circuit.pre[mutual]])
    second = np.concatenate([circuit.post[one_way], circuit.post[mutual]])
    ties = np.repeat([SENDS, MUTUAL], [one_way.sum(), mutual.sum()])
    return first.astype(np.int64), second.astype(np.int64), ties


def _neighbour_bits(cells_n: int, first, second, ties) -> np.ndarray:
    """Return bits of every cell's neighbours by tie, (3, cells, words)."""
    words = -(-cells_n // 64)
    out = np.zeros((3, cells_n, words), np.uint64)
    for tie, a, b in (
        (SENDS, first[ties == SENDS], second[ties == SENDS]),
        (RECEIVES, second[ties == SENDS], first[ties == SENDS]),
        (MUTUAL, first[ties == MUTUAL], second[ties == MUTUAL]),
        (MUTUAL, second[ties == MUTUAL], first[ties == MUTUAL]),
    ):
        bit = np.uint64(1) << (b % 64).astype(np.uint64)
        np.bitwise_or.at(out[tie], (a, b // 64), bit)
    return out


def _closed(cells_n: int, first, second, ties) -> dict[tuple[int, int, int], float]:
    """Count triads with three connected dyads by (tie a-b, tie b-c, tie a-c).

    Each is met once from every dyad, so that counts are thirds of what is found.
    """
    bits = _neighbour_bits(cells_n, first, second, ties)
    out: dict[tuple[int, int, int], float] = {}
    for tie in (SENDS, MUTUAL):
        chosen = ties == tie
        found = np.zeros((3, 3), np.int64)
        count_common(first[chosen], second[chosen], bits, found)
        for x in range(3):
            for y in range(3):
                key = (tie, y, x)
                out[key] = out.get(key, 0.0) + found[x, y] / 3.0
    return out


def triad_census(circuit: AuditCircuit) -> dict[str, int]:
    """Count all triads of cells by class, from common neighbours and degrees."""
    n = circuit.cells.cells_n
    first, second, ties = _dyads(circuit)
    counts = dict.fromkeys(CLASSES, 0.0)
    paths: dict[tuple[int, int], float] = {}
    for (ab, bc, ac), number in _closed(n, first, second, ties).items():
        counts[triad_class((ab, bc, ac))] += number
        # Every corner of a closed triad is a path of two dyads that is not open.
        for corner in ((ab, ac), (_MIRROR[ab], bc), (_MIRROR[bc], _MIRROR[ac])):
            key = tuple(sorted(corner))
            paths[key] = paths.get(key, 0.0) + number
    one_way = ties == SENDS
    sends = np.bincount(first[one_way], minlength=n).astype(float)
    receives = np.bincount(second[one_way], minlength=n).astype(float)
    both = np.bincount(
        np.concatenate([first[~one_way], second[~one_way]]), minlength=n
    ).astype(float)
    degree = (sends, receives, both)
    dyads_left = {SENDS: float(one_way.sum()), MUTUAL: float((~one_way).sum())}
    in_open = {SENDS: 0.0, MUTUAL: 0.0}
    for x in range(3):
        for y in range(x, 3):
            pairs = degree[x] @ degree[y] if x != y else degree[x] @ (degree[x] - 1) / 2
            number = float(pairs) - paths.get((x, y), 0.0)
            # The centre is a, with ties x to b and y to c; b and c are not connected.
            counts[triad_class((x, NULL, y))] += number
            for tie in (x, y):
                in_open[MUTUAL if tie == MUTUAL else SENDS] += number
    in_closed = {SENDS: 0.0, MUTUAL: 0.0}
    for name, number in counts.items():
        if name[2] == "0" and name[:3] != "003":
            in_closed[SENDS] += int(name[1]) * number
            in_closed[MUTUAL] += int(name[0]) * number
    for tie, name in ((SENDS, "012"), (MUTUAL, "102")):
        counts[name] = dyads_left[tie] * (n - 2) - in_open[tie] - in_closed[tie]
    whole = {name: round(number) for name, number in counts.items()}
    whole["003"] = n * (n - 1) * (n - 2) // 6 - sum(whole.values())
    return whole


def graph_facts(circuit: AuditCircuit) -> dict[str, object]:
    """Return density, degrees by type, reciprocity and triad census of a circuit."""
    n, types = circuit.cells.cells_n, circuit.cells.type_index
    connections = circuit.pre.size
    back = circuit.connected(circuit.post, circuit.pre)
    out_degree = np.bincount(circuit.pre, minlength=n)
    in_degree = np.bincount(circuit.post, minlength=n)
    by_type = [
        {
            "cell_type": name,
            "cells": int((types == place).sum()),
            **_spread("out", out_degree[types == place]),
            **_spread("in", in_degree[types == place]),
        }
        for place, name in enumerate(circuit.type_names)
    ]
    return {
        "cells": n,
        "connections": int(connections),
        "density": connections / (n * (n - 1)) if n > 1 else 0.0,
        "reciprocity": float(back.mean()) if connections else 0.0,
        "degrees": by_type,
        "triads": triad_census(circuit),
    }


def _spread(name: str, degree: np.ndarray) -> dict[str, float]:
    if not degree.size:
        return {f"{name}_degree_mean": 0.0, f"{name}_degree_sd": 0.0}
    return {
        f"{name}_degree_mean": float(degree.mean()),
        f"{name}_degree_sd": float(degree.std()),
    }
