"""The two tables that tell what was fitted: by pathway and by recording."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy.stats import norm

from circuitgen.core.tables import names_column
from circuitgen.run.circuit import Circuit
from circuitgen.run.windows import REFERENCE_HIGH_UM, Histograms
from circuitgen.run.wire import Realised
from circuitgen.wiring import (
    Law,
    RowFit,
    WiringFit,
    largest_probability,
    moments,
    wilson_interval,
)

_Z95 = float(norm.ppf(0.975))
NAN = float("nan")


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


def _pathway_row(fit: WiringFit, histograms: Histograms, pathway) -> dict[str, object]:
    everything = histograms.everything[pathway]
    touching = int(everything[1:].sum())
    window = _own_window(fit, pathway) if fit.recorded[pathway] else None
    if window is None:
        histogram, (low, high) = histograms.reference[pathway], (0.0, REFERENCE_HIGH_UM)
    else:
        histogram, (low, high) = window.histograms[pathway], window.recording.window_um()
    law = fit.laws[pathway]
    row: dict[str, object] = {
        "pairs_n": int(everything.sum()),
        "touching_pairs_n": touching,
        "appositions_mean": everything @ np.arange(everything.size) / touching
        if touching
        else NAN,
        "recorded": fit.recorded[pathway],
        "distance_low_um": low,
        "distance_high_um": high if np.isfinite(high) else NAN,
    }
    keys = ("p_connect", "p_connect_low", "p_connect_high", "p_ceiling")
    keys += ("synapses_mean", "synapses_mean_low", "synapses_mean_high")
    if not histogram.sum():
        return row | dict.fromkeys(keys, NAN)
    found = moments(histogram, law)
    bounds = [
        moments(histogram, Law(t0, law.t1, law.t2)).probability
        if not np.isnan(t0)
        else t0
        for t0 in (fit.t0_low[pathway], fit.t0_high[pathway])
    ]
    values = (found.probability, *bounds, largest_probability(histogram), found.mean)
    return row | dict(zip(keys, values + _mean_bounds(window, found), strict=True))


def _mean_bounds(window, found) -> tuple[float, float]:
    """95 % interval of the mean number of synapses, from the row that measured it."""
    recording = window.recording if window else None
    if recording is None or recording.synapses_pairs_n is None:
        return NAN, NAN
    sd = found.sd if recording.synapses_sd is None else recording.synapses_sd
    half = _Z95 * sd / np.sqrt(recording.synapses_pairs_n)
    return max(found.mean - half, 1.0), found.mean + half


def pathways_table(circuit: Circuit, fit: WiringFit, histograms: Histograms):
    """Return the columns of the table of pathways."""
    names, n = circuit.spec.type_names, len(circuit.spec.type_names)
    pathways = sorted(
        np.ndindex(n, n), key=lambda pathway: (names[pathway[0]], names[pathway[1]])
    )
    rows = [_pathway_row(fit, histograms, pathway) for pathway in pathways]
    columns = {key: [row[key] for row in rows] for key in rows[0]}
    columns["pre_type"] = names_column([pre for pre, _ in pathways], names)
    columns["post_type"] = names_column([post for _, post in pathways], names)
    return columns


def _fit_row(row: RowFit, realised: Realised) -> dict[str, object]:
    recording, fitted = row.window.recording, row.fitted
    pairs_n = int(row.window.histogram().sum())
    n, k = recording.tested_n, recording.connected_n
    low, high = wilson_interval(k, n) if n else (NAN, NAN)
    p, z = fitted.probability, NAN
    if n and 0 < p < 1:
        z = (k / n - p) / np.sqrt(p * (1 - p) / n)
    measured = recording.measured_probability
    some = realised.connected > 0
    mean = realised.synapses / realised.connected if some else NAN
    spread = realised.squares / realised.connected - mean**2 if some else NAN
    return {
        "row": recording.row,
        "source": recording.source,
        "pre_type": recording.pre_type,
        "post_type": recording.post_type,
        "use": recording.use,
        "distance_kind": recording.distance_kind,
        "distance_low_um": recording.distance_low_um,
        "distance_high_um": recording.distance_high_um,
        "tested_n": n,
        "connected_n": k,
        "p_measured": NAN if measured is None else measured,
        "p_measured_low": low,
        "p_measured_high": high,
        "p_fitted": p,
        "p_realised": realised.connected / pairs_n if pairs_n else NAN,
        "pairs_in_window_n": pairs_n,
        "z": z,
        "synapses_mean_measured": recording.synapses_mean,
        "synapses_mean_fitted": fitted.mean,
        "synapses_mean_realised": mean,
        "synapses_sd_measured": recording.synapses_sd,
        "synapses_sd_fitted": fitted.sd,
        "synapses_sd_realised": np.sqrt(max(spread, 0.0)) if some else NAN,
        "feasible": row.feasible,
        "note": row.note,
    }


def fit_table(fit: WiringFit, realised: Sequence[Realised]) -> dict[str, list]:
    """Return the columns of the table of recordings."""
    rows = [_fit_row(row, shown) for row, shown in zip(fit.rows, realised, strict=True)]
    return {key: [row[key] for row in rows] for key in rows[0]} if rows else {}


def recordings_met(fit_columns: dict[str, list]) -> tuple[int, int]:
    """Return how many fitted rows with counts are met, and how many there are.

    Met: the fitted probability lies within the row's own 95 % interval.
    """
    rows = list(
        zip(
            fit_columns["use"],
            fit_columns["p_measured_low"],
            fit_columns["p_fitted"],
            fit_columns["p_measured_high"],
            strict=True,
        )
    )
    counted = [row for row in rows if row[0] == "fit" and not np.isnan(row[1])]
    met = [1 for _, low, p, high in counted if low <= p <= high]
    return len(met), len(counted)
