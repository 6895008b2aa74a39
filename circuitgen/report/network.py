"""Degrees and reciprocity of the drawn circuit."""

from __future__ import annotations

import numpy as np

from circuitgen.report.source import RunTables

BARS = 24


def _histogram(values: np.ndarray, width: int) -> list[int]:
    return np.bincount(values // width).tolist() if values.size else []


def degrees(run: RunTables) -> dict:
    """Return in- and out-degree: histograms by sign, means by type.

    A degree counts connected partners, other cells only.
    """
    pre, post = _others(run)
    types, n = run.cells.type_index, run.cells.type_index.size
    out_n, in_n = np.bincount(pre, minlength=n), np.bincount(post, minlength=n)
    width = max(1, int(np.ceil((max(out_n.max(), in_n.max()) + 1) / BARS))) if n else 1
    excitatory = np.array(run.is_excitatory)[types]
    rows = []
    for index, name in enumerate(run.type_names):
        own = types == index
        means = [float(a[own].mean()) if own.any() else None for a in (out_n, in_n)]
        rows.append(
            {
                "cell_type": name,
                "cells_n": int(own.sum()),
                "out_mean": means[0],
                "in_mean": means[1],
            }
        )
    return {
        "bin": width,
        "out": [_histogram(out_n[excitatory == s], width) for s in (True, False)],
        "in": [_histogram(in_n[excitatory == s], width) for s in (True, False)],
        "types": rows,
    }


def _others(run: RunTables) -> tuple[np.ndarray, np.ndarray]:
    pre, post = run.edges["pre_cell_id"], run.edges["post_cell_id"]
    others = pre != post
    return pre[others].astype(np.int64), post[others].astype(np.int64)


def reciprocity(run: RunTables) -> list[dict]:
    """Return one row per unordered pair of types that has connections.

    `both_n` of the `pairs_n` unordered pairs of cells are connected both ways. By
    chance `chance_n` would be, if all pairs of the two types were alike and the two
    directions independent: pairs x probability there x probability back.
    """
    pre, post = _others(run)
    types, types_n = run.cells.type_index, len(run.type_names)
    n = types.size
    cells_n = np.bincount(types, minlength=types_n)
    there, back = pre * n + post, post * n + pre
    mutual = np.isin(there, back, assume_unique=True)
    code = run.pathway_code(pre, post)
    connected = np.bincount(code, minlength=types_n**2).reshape(types_n, types_n)
    both = np.bincount(code[mutual], minlength=types_n**2).reshape(types_n, types_n)
    rows = []
    for a in range(types_n):
        for b in range(a, types_n):
            same = a == b
            pairs = cells_n[a] * (cells_n[b] - same) // (2 if same else 1)
            ordered = pairs * (2 if same else 1)
            if not pairs or not connected[a, b] + connected[b, a]:
                continue
            chance = pairs * (connected[a, b] / ordered) * (connected[b, a] / ordered)
            rows.append(
                {
                    "a_type": run.type_names[a],
                    "b_type": run.type_names[b],
                    "pairs_n": int(pairs),
                    "a_to_b_n": int(connected[a, b]),
                    "b_to_a_n": int(connected[b, a]),
                    "both_n": int(both[a, b]) // (2 if same else 1),
                    "chance_n": float(chance),
                }
            )
    return rows
