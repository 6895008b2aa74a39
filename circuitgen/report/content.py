"""All that the page shows, as plain data: gathered once, used by page and figures."""

from __future__ import annotations

import numpy as np

from circuitgen.report.anatomy import profile, shown_cells, somata
from circuitgen.report.drawing import ArborShelf
from circuitgen.report.network import degrees, reciprocity
from circuitgen.report.pairs import shown_pairs
from circuitgen.report.recordings import judged
from circuitgen.report.source import RunTables
from circuitgen.report.totals import (
    BIN_UM,
    MOST_IN_HISTOGRAM,
    ConnectionTotals,
    PairTotals,
    connection_totals,
    pair_totals,
    thickness_um,
)

# Beyond this many pathways only the most connected ones keep their distributions.
MOST_DETAILED_PATHWAYS = 3600


def _short(values) -> list:
    """Round to four digits; NaN becomes None."""
    return [
        None if np.isnan(v) else float(f"{v:.4g}") for v in np.asarray(values, float)
    ]


def _trimmed(counts: np.ndarray) -> list[int]:
    some = np.flatnonzero(counts)
    return counts[: some[-1] + 1].tolist() if some.size else []


def _curves(run: RunTables) -> dict[tuple[str, str], dict]:
    """Return the curves of curves.csv by pathway."""
    out: dict[tuple[str, str], dict] = {}
    for row in run.curves:
        key = (row["pre_type"], row["post_type"])
        curve = out.setdefault(
            key,
            {
                "first": round(row["distance_low_um"] / BIN_UM),
                "n": [],
                "p": [],
                "low": [],
                "high": [],
            },
        )
        curve["n"].append(row["pairs_n"])
        for name, column in (("p", ""), ("low", "_low"), ("high", "_high")):
            value = row[f"p_connect{column}"]
            curve[name].append(None if value is None else float(f"{value:.4g}"))
    return out


def _details(run: RunTables, totals: PairTotals, drawn: ConnectionTotals) -> dict:
    """Return curve and histograms of each pathway that has any, by its code."""
    curves = _curves(run)
    touching = totals.appositions.sum(axis=1)
    codes = np.argsort(-touching, kind="stable")[:MOST_DETAILED_PATHWAYS]
    out, n = {}, len(run.type_names)
    for code in sorted(codes.tolist()):
        if not touching[code]:
            continue
        key = (run.type_names[code // n], run.type_names[code % n])
        out[str(code)] = {
            "curve": curves.get(key, {}),
            "appositions": _trimmed(totals.appositions[code]),
            "synapses": _trimmed(drawn.synapses[code]),
            "delays": _trimmed(drawn.delays[code]),
        }
    return out


def gather(run: RunTables) -> dict:
    """Return the content of the report, ready for JSON."""
    totals, drawn, shelf = pair_totals(run), connection_totals(run), ArborShelf(run)
    return {
        "types": [
            {"name": name, "excitatory": bool(sign)}
            for name, sign in zip(run.type_names, run.is_excitatory, strict=True)
        ],
        "groups": {k: list(v) for k, v in (run.spec.get("groups") or {}).items()},
        "recordings": judged(run.recordings),
        "pathways": run.pathways,
        "bin_um": BIN_UM,
        "most": MOST_IN_HISTOGRAM,
        "delay_bin_ms": drawn.delay_bin_ms,
        "details": _details(run, totals, drawn),
        "thickness_um": thickness_um(run),
        "somata": somata(run),
        "profile": profile(run),
        "shown_cells": shown_cells(run, shelf),
        "degrees": degrees(run),
        "reciprocity": reciprocity(run),
        "by_depth": totals.by_depth.tolist(),
        "shown_pairs": shown_pairs(run, shelf),
    }
