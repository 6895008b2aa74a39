"""Predicted connectivity of pathways in any window of distances, or in a slice."""

from __future__ import annotations

import numpy as np
import pandas as pd

from circuitgen.prediction.quantiles import summarise
from circuitgen.prediction.tables import RunTables
from circuitgen.run import Protocol
from circuitgen.wiring import show

_MEASURES = (
    "row source pre_type post_type tested_n connected_n p_measured p_measured_low"
)
_MEASURES += " p_measured_high distance_low_um distance_high_um distance_kind use"


def everyone(tables: RunTables, low_um: float, high_um: float, *, lateral: bool):
    """Return the protocol that samples all pathways in a window."""
    types = tuple(range(tables.types_n))
    return Protocol(types, types, low_um, high_um, lateral)


def prediction_row(tables: RunTables, code: int, histogram: np.ndarray) -> dict:
    """Return what the posterior says of the pairs of one histogram."""
    pre, post = divmod(code, tables.types_n)
    drawn = show(tables.draws, {code: histogram})
    pairs = float(histogram.sum())
    without = float(np.trace(histogram) if histogram.ndim == 2 else histogram[0])
    return {
        "pre_type": tables.type_names[pre],
        "post_type": tables.type_names[post],
        "pairs": pairs,
        "p_ceiling": 1.0 - without / pairs if pairs else None,
        "p_connect": summarise(drawn.probability),
        "synapses_mean": summarise(drawn.mean),
    }


def predict_window(tables: RunTables, protocol: Protocol) -> list[dict]:
    """Predict every pathway of a protocol, the least known first."""
    rows = [
        prediction_row(tables, code, histogram)
        for code, histogram in tables.histograms(protocol).items()
    ]
    return by_ignorance(rows)


def stored_predictions(tables: RunTables) -> list[dict]:
    """Return the predictions that the run folder holds, the least known first.

    Each pathway in the window of its own recording, else within 100 um.
    """
    frame = pd.read_csv(tables.folder / "pathways.csv", keep_default_na=False,
                        na_values=[""])  # fmt: skip
    rows = []
    for row in frame.to_dict("records"):
        known = {k: None if isinstance(v, float) and np.isnan(v) else v
                 for k, v in row.items()}  # fmt: skip
        rows.append(
            {name: known[name] for name in ("pre_type", "post_type", "recorded")}
            | {name: known[name] for name in ("distance_low_um", "distance_high_um")}
            | {"pairs": known["pairs_n"], "p_ceiling": known["p_ceiling"]}
            | {
                name: {
                    "low": known[f"{name}_low"],
                    "low_50": known[f"{name}_low_50"],
                    "median": known[name],
                    "high_50": known[f"{name}_high_50"],
                    "high": known[f"{name}_high"],
                }
                for name in ("p_connect", "synapses_mean")
            }
        )
    return by_ignorance(rows)


def by_ignorance(rows: list[dict]) -> list[dict]:
    """Sort pathways by the width of the 90 % interval of their probability."""

    def width(row: dict) -> float:
        p = row["p_connect"]
        return -1.0 if p["high"] is None else p["high"] - p["low"]

    return sorted(rows, key=lambda r: (-width(r), r["pre_type"], r["post_type"]))


def curve(tables: RunTables, pre_type: str, post_type: str) -> list[dict]:
    """Return a pathway's probability by distance of the somata."""
    frame = pd.read_csv(tables.folder / "curves.csv", keep_default_na=False,
                        na_values=[""])  # fmt: skip
    mine = frame[(frame.pre_type == pre_type) & (frame.post_type == post_type)]
    return [
        {k: None if isinstance(v, float) and np.isnan(v) else v for k, v in row.items()}
        for row in mine.drop(columns=["pre_type", "post_type"]).to_dict("records")
    ]


def recorded_points(tables: RunTables, pre_type: str, post_type: str) -> list[dict]:
    """Return the recordings of exactly this pathway."""
    frame = pd.read_csv(tables.folder / "fit.csv", keep_default_na=False, na_values=[""])
    if frame.empty:
        return []
    mine = frame[(frame.pre_type == pre_type) & (frame.post_type == post_type)]
    return [
        {k: None if isinstance(v, float) and np.isnan(v) else v for k, v in row.items()}
        for row in mine[_MEASURES.split()].to_dict("records")
    ]
