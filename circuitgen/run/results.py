"""The tables of what was fitted: by pathway, distance, recording and draw."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from circuitgen.core.tables import names_column
from circuitgen.run.circuit import Circuit
from circuitgen.run.distances import BIN_EDGES_UM, DistanceBins
from circuitgen.run.protocol import REFERENCE_HIGH_UM
from circuitgen.run.windows import Histograms
from circuitgen.run.wire import Realised
from circuitgen.wiring import (
    INTERVAL,
    Laws,
    RowFit,
    WiringFit,
    largest_probability,
    show,
    wilson_interval,
)

NAN = float("nan")
# Stands for a recording's row where the pairs are all pairs of the circuit.
ALL_PAIRS = 0
_MIDDLE_HALF = (0.25, 0.75)


def _quantiles(values: np.ndarray, points) -> list[float]:
    """Quantiles of the draws that show something, NaN where none does."""
    known = values[~np.isnan(values)]
    return np.quantile(known, points).tolist() if known.size else [NAN] * len(points)


def _own_window(fit: WiringFit, pathway):
    """Return the first row that recorded a pathway by itself, else one of a group."""
    rows = [
        row.window
        for row in fit.rows
        if pathway in row.window.pathways
        and row.window.recording.use == "fit"
        and row.window.recording.measured_probability is not None
        and row.window.histograms[pathway].sum() > 0
    ]
    return min(rows, key=lambda w: (len(w.pathways), w.recording.row), default=None)


def _pathway_row(fit: WiringFit, histograms: Histograms, pathway, code):
    everything = histograms.everything[pathway]
    touching = int(everything[1:].sum())
    window = _own_window(fit, pathway) if fit.recorded[code] else None
    low, high, histogram = 0.0, REFERENCE_HIGH_UM, histograms.reference[pathway]
    # A slice is the row's own affair: pathways are reported in the whole circuit.
    if window is not None and window.histograms[pathway].ndim == 1:
        histogram, (low, high) = window.histograms[pathway], window.recording.window_um()
    row: dict[str, object] = {
        "pairs_n": int(everything.sum()),
        "touching_pairs_n": touching,
        "appositions_mean": everything @ np.arange(everything.size) / touching
        if touching
        else NAN,
        "recorded": bool(fit.recorded[code]),
        "distance_low_um": low,
        "distance_high_um": high if np.isfinite(high) else NAN,
    }
    drawn, mine = show(fit.draws, {code: histogram}), show(fit.laws, {code: histogram})
    points = (0.5, *INTERVAL, *_MIDDLE_HALF)
    names = ("", "_low", "_high", "_low_50", "_high_50")
    for name, values in (
        ("p_connect", drawn.probability),
        ("synapses_mean", drawn.mean),
    ):
        found = _quantiles(values, points)
        row |= {name + end: x for end, x in zip(names, found, strict=True)}
    some = histogram.sum() > 0
    row["p_drawn"] = float(mine.probability[0])
    row["p_ceiling"] = largest_probability(histogram) if some else NAN
    return row


def _pathways(circuit: Circuit):
    """Return (pre, post) of all pathways in the order of the tables."""
    names, n = circuit.spec.type_names, len(circuit.spec.type_names)
    return sorted(np.ndindex(n, n), key=lambda p: (names[p[0]], names[p[1]]))


def _with_types(circuit: Circuit, pathways, columns: dict) -> dict[str, object]:
    names = circuit.spec.type_names
    columns["pre_type"] = names_column([pre for pre, _ in pathways], names)
    columns["post_type"] = names_column([post for _, post in pathways], names)
    return columns


def pathways_table(circuit: Circuit, fit: WiringFit, histograms: Histograms):
    """Return the columns of the table of pathways."""
    pathways, n = _pathways(circuit), len(circuit.spec.type_names)
    rows = [_pathway_row(fit, histograms, p, p[0] * n + p[1]) for p in pathways]
    columns = {key: [row[key] for row in rows] for key in rows[0]}
    return _with_types(circuit, pathways, columns)


def curves_table(circuit: Circuit, fit: WiringFit, bins: DistanceBins):
    """Return the columns of the table of probability by distance."""
    n, of_rows, rows = len(circuit.spec.type_names), [], []
    for pathway in _pathways(circuit):
        code = pathway[0] * n + pathway[1]
        for place, histogram in enumerate(bins.histograms[pathway]):
            drawn = show(fit.draws, {code: histogram}).probability
            low, middle, high = _quantiles(drawn, (INTERVAL[0], 0.5, INTERVAL[1]))
            some = histogram.sum() > 0
            of_rows.append(pathway)
            rows.append(
                {
                    "distance_low_um": BIN_EDGES_UM[place],
                    "distance_high_um": BIN_EDGES_UM[place + 1],
                    "pairs_n": int(histogram.sum()),
                    "p_ceiling": largest_probability(histogram) if some else NAN,
                    "p_connect_low": low,
                    "p_connect": middle,
                    "p_connect_high": high,
                }
            )
    columns = {key: [row[key] for row in rows] for key in rows[0]}
    return _with_types(circuit, of_rows, columns)


def laws_table(circuit: Circuit, laws: Laws, draws: Laws) -> dict[str, object]:
    """Return the columns of the table of laws: what the circuit has, then the draws."""
    names, n = circuit.spec.type_names, len(circuit.spec.type_names)
    columns: dict[str, object] = {
        name: np.concatenate([getattr(laws, name), getattr(draws, name)]).reshape(-1)
        for name in ("t0", "t1", "t2")
    }
    sets_n = draws.draws_n + 1
    columns["draw"] = np.repeat(np.arange(sets_n), n * n)
    pre, post = np.divmod(np.tile(np.arange(n * n), sets_n), n)
    columns["pre_type"] = names_column(pre, names)
    columns["post_type"] = names_column(post, names)
    return columns


def windows_table(circuit: Circuit, histograms: Histograms) -> dict[str, object]:
    """Return the columns of the table of windows: all pairs, then every row's pairs."""
    parts = [(ALL_PAIRS, histograms.everything)]
    parts += sorted(
        ((w.recording.row, w.histograms) for w in histograms.windows),
        key=lambda part: part[0],
    )
    rows: list[tuple] = []
    for number, by_pathway in parts:
        for pathway in sorted(by_pathway):
            histogram = by_pathway[pathway]
            full = histogram if histogram.ndim == 2 else histogram[:, None]
            a, lost = np.nonzero(full)
            weight = full[a, lost].astype(float)
            rows += [(number, *pathway, *x) for x in zip(a, lost, weight, strict=True)]
    number, pre, post, a, lost, weight = zip(*rows, strict=True)
    names = circuit.spec.type_names
    return {
        "recording_row": np.array(number),
        "pre_type": names_column(pre, names),
        "post_type": names_column(post, names),
        "appositions_n": np.array(a),
        "lost_n": np.array(lost),
        "pairs": np.array(weight),
    }


def _fit_row(row: RowFit, realised: Realised, reciprocal: tuple[float, float]):
    recording = row.window.recording
    pairs = row.window.pairs_n
    n, k = recording.tested_n, recording.connected_n
    low, high = wilson_interval(k, n) if n else (NAN, NAN)
    p, z = float(row.fitted.probability[0]), NAN
    if n and 0 < p < 1:
        z = (k / n - p) / np.sqrt(p * (1 - p) / n)
    measured = recording.measured_probability
    some = realised.connected > 0
    mean = realised.synapses / realised.connected if some else NAN
    spread = realised.squares / realised.connected - mean**2 if some else NAN
    p_low, p_high = _quantiles(row.drawn.probability, INTERVAL)
    kept = (
        "row source pre_type post_type use distance_kind distance_low_um"
        " distance_high_um slice_thickness_um soma_depth_low_um soma_depth_high_um"
        " tested_n connected_n synapses_pairs_n reciprocal_tested_n"
        " reciprocal_connected_n cluster_size"
    )
    return {name: getattr(recording, name) for name in kept.split()} | {
        "p_measured": NAN if measured is None else measured,
        "p_measured_low": low,
        "p_measured_high": high,
        "p_fitted": p,
        "p_fitted_low": p_low,
        "p_fitted_high": p_high,
        "p_realised": realised.connected / pairs if pairs else NAN,
        "pairs_in_window": pairs,
        "z": z,
        "synapses_mean_measured": recording.synapses_mean,
        "synapses_mean_fitted": float(row.fitted.mean[0]),
        "synapses_mean_realised": mean,
        "synapses_sd_measured": recording.synapses_sd,
        "synapses_sd_fitted": float(row.fitted.sd[0]),
        "synapses_sd_realised": np.sqrt(max(spread, 0.0)) if some else NAN,
        "reciprocal_fitted": reciprocal[0],
        "reciprocal_realised": reciprocal[1],
        "feasible": row.feasible,
        "note": row.note,
    }


def fit_table(
    fit: WiringFit, realised: Sequence[Realised], both_ways: Sequence[float]
) -> dict[str, list]:
    """Return the columns of the table of recordings.

    `both_ways`: for every row the realised share of reciprocal pairs, or NaN.
    """
    fitted = {row.window.recording.row: row for row in fit.reciprocity.rows}
    rows = []
    for row, shown, share in zip(fit.rows, realised, both_ways, strict=True):
        dyads = fitted.get(row.window.recording.row)
        columns = _fit_row(row, shown, (dyads.fitted if dyads else NAN, share))
        if dyads and dyads.note:
            columns["note"] = "; ".join(filter(None, [columns["note"], dyads.note]))
            columns["feasible"] = False
        rows.append(columns)
    return {key: [row[key] for row in rows] for key in rows[0]} if rows else {}


def recordings_met(fit_columns: dict[str, list]) -> tuple[int, int]:
    """Return how many fitted rows with counts are met, and how many there are.

    Met: the fitted probability lies within the row's own 95 % interval.
    """
    names = ("use", "p_measured_low", "p_fitted", "p_measured_high")
    rows = list(zip(*(fit_columns.get(name, []) for name in names), strict=True))
    counted = [row for row in rows if row[0] == "fit" and not np.isnan(row[1])]
    met = [1 for _, low, p, high in counted if low <= p <= high]
    return len(met), len(counted)
