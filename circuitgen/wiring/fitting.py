"""Laws for all pathways from the recordings, each under its own distance window.

A pathway's own rows decide its law: one row is matched exactly, several are fitted by
maximum likelihood (binomial counts, normal mean numbers of synapses). Rows of groups
decide together for those member pathways that have no row of their own. A pathway that
nobody recorded takes the law pooled over the recorded pathways of its class of signs,
which is marked and carries no interval.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy.optimize import minimize
from scipy.special import expit, logit

from circuitgen.spec import Recording
from circuitgen.wiring.intervals import wilson_interval
from circuitgen.wiring.law import Law, Moments, moments
from circuitgen.wiring.match import largest_probability, match, solve_t0

Pathway = tuple[int, int]
# A row with a probability and no counts is to be met exactly; among several rows it
# weighs as a very large sample.
_EXACT_N = 10_000_000
_DEFAULT_SD = 1.0
_LEAST_Q = 1e-15


@dataclass(frozen=True)
class Window:
    """A recording and the pairs that it could have sampled.

    `histograms` maps each pathway (indices of the types) to the number of ordered
    pairs within the distance window by number of appositions, from 0.
    """

    recording: Recording
    histograms: Mapping[Pathway, np.ndarray]

    @property
    def pathways(self) -> tuple[Pathway, ...]:
        """The pathways that the row pools."""
        return tuple(self.histograms)

    def histogram(self, pathways: Sequence[Pathway] | None = None) -> np.ndarray:
        """Sum of the histograms of some pathways, all by default."""
        chosen = self.pathways if pathways is None else pathways
        parts = [self.histograms[pathway] for pathway in chosen]
        out = np.zeros(max((part.size for part in parts), default=1), np.int64)
        for part in parts:
            out[: part.size] += part
        return out


@dataclass
class _Unit:
    """Pathways that share one law because the same rows decide it."""

    pathways: list[Pathway]
    windows: list[Window]
    law: Law | None = None
    # The exponent t1 of the law without t2, which like pathways may share.
    plain_t1: float = 0.0
    interval: tuple[float, float] = (np.nan, np.nan)
    feasible: bool = True
    notes: list[str] = field(default_factory=list)

    def histogram(self, window: Window) -> np.ndarray:
        return window.histogram([p for p in window.pathways if p in self.pathways])


@dataclass(frozen=True)
class RowFit:
    """What the laws make of one recording; `fitted` pools its pathways."""

    window: Window
    fitted: Moments
    feasible: bool
    note: str


@dataclass(frozen=True)
class WiringFit:
    """Laws of all pathways, by (presynaptic, postsynaptic) type.

    t0_low and t0_high give the 95 % interval of the connection probability where the
    pathway was recorded with counts, NaN elsewhere.
    """

    laws: dict[Pathway, Law]
    t0_low: dict[Pathway, float]
    t0_high: dict[Pathway, float]
    recorded: dict[Pathway, bool]
    rows: tuple[RowFit, ...]


def _target(recording: Recording) -> tuple[float, int]:
    """Probability to fit and its sample size.

    With no or all pairs connected the odds (k + 1/2) / (n + 1) stand in for 0 or 1,
    which no sample can establish.
    """
    if recording.tested_n is None:
        return recording.probability, _EXACT_N
    k, n = recording.connected_n, recording.tested_n
    return ((k + 0.5) / (n + 1) if k in (0, n) else k / n), n


def _units(windows: Sequence[Window]) -> list[_Unit]:
    """Sort pathways by the rows that decide their law."""
    usable = [
        w
        for w in windows
        if w.recording.use == "fit"
        and w.recording.measured_probability is not None
        and w.histogram().sum() > 0
    ]
    own: dict[Pathway, list[Window]] = {}
    shared: dict[Pathway, list[Window]] = {}
    for window in usable:
        for pathway in window.pathways:
            if window.histograms[pathway].sum() == 0:
                continue
            book = own if len(window.pathways) == 1 else shared
            book.setdefault(pathway, []).append(window)
    units = [_Unit([pathway], rows) for pathway, rows in own.items()]
    pooled: dict[tuple[int, ...], _Unit] = {}
    for pathway, rows in shared.items():
        if pathway not in own:
            key = tuple(row.recording.row for row in rows)
            pooled.setdefault(key, _Unit([], rows)).pathways.append(pathway)
    return units + list(pooled.values())


def _fit_one_row(unit: _Unit, t1_given: float) -> None:
    window = unit.windows[0]
    recording, histogram = window.recording, unit.histogram(window)
    probability, _ = _target(recording)
    mean, sd = recording.synapses_mean, recording.synapses_sd
    found = match(histogram, probability, mean, sd, t1_given)
    unit.law, unit.feasible = found.law, found.feasible
    plain = found if sd is None else match(histogram, probability, mean)
    unit.plain_t1 = plain.law.t1
    unit.notes += [found.note] if found.note else []
    if recording.connected_n in (0, recording.tested_n) and recording.tested_n:
        unit.notes.append("fitted at (k + 1/2) / (n + 1)")


def _fit_many_rows(unit: _Unit, t1_given: float) -> None:
    """Fit t0 and t1 (if any row tells of synapses) to all rows of a unit at once."""
    rows = [
        (w.recording, unit.histogram(w), *_target(w.recording)) for w in unit.windows
    ]
    has_mean = any(r.synapses_mean is not None for r, *_ in rows)

    def loss(x: np.ndarray) -> float:
        law, total = Law(float(x[0]), float(x[1]) if has_mean else t1_given), 0.0
        for recording, histogram, probability, n in rows:
            found = moments(histogram, law)
            p = min(max(found.probability, 1e-12), 1 - 1e-12)
            total -= n * (probability * np.log(p) + (1 - probability) * np.log1p(-p))
            if recording.synapses_mean is not None and np.isfinite(found.mean):
                sd = recording.synapses_sd or _DEFAULT_SD
                error = sd / np.sqrt(recording.synapses_pairs_n or _EXACT_N)
                total += 0.5 * ((found.mean - recording.synapses_mean) / error) ** 2
        return total

    first = match(rows[0][1], rows[0][2], rows[0][0].synapses_mean, None, t1_given).law
    start = [np.clip(first.t0, -20, 20), np.clip(first.t1, -20, 20)]
    options = {"xatol": 1e-8, "fatol": 1e-9, "maxiter": 4000}
    size = 2 if has_mean else 1
    best = minimize(loss, start[:size], method="Nelder-Mead", options=options).x
    unit.law = Law(float(best[0]), float(best[1]) if has_mean else t1_given)
    unit.plain_t1 = unit.law.t1
    unit.notes.append(f"fitted together with {len(rows) - 1} other rows")


def _pooled_t1(units: Sequence[_Unit], classes, wanted) -> float | None:
    """Pool t1 over the fitted units of a class, over all when `wanted` is None.

    The share of sites used, q = 1 / (1 + exp(-t1)), is averaged: it stays between 0
    and 1 where a mean of exactly one synapse puts t1 at minus infinity.
    """
    values = [
        unit.plain_t1
        for unit in units
        if unit.law is not None
        and (wanted is None or classes(unit.pathways[0]) == wanted)
    ]
    if not values:
        return None
    return float(logit(np.clip(np.mean(expit(values)), _LEAST_Q, 1 - _LEAST_Q)))


def _interval(unit: _Unit) -> tuple[float, float]:
    """t0 at the Wilson bounds of all counts of a unit together, NaN without counts."""
    counted = [w for w in unit.windows if w.recording.tested_n]
    if not counted or not np.isfinite(unit.law.t0):
        return np.nan, np.nan
    k = sum(w.recording.connected_n for w in counted)
    n = sum(w.recording.tested_n for w in counted)
    parts = [unit.histogram(w) / unit.histogram(w).sum() for w in counted]
    mixed = np.zeros(max(part.size for part in parts))
    for part, window in zip(parts, counted, strict=True):
        mixed[: part.size] += part * window.recording.tested_n
    most = largest_probability(mixed)
    low, high = wilson_interval(k, n)
    return (
        solve_t0(mixed, min(low, most), unit.law.t1, unit.law.t2),
        solve_t0(mixed, min(high, most), unit.law.t1, unit.law.t2),
    )


def _class_laws(units: Sequence[_Unit], classes) -> dict[object, Law]:
    """Law pooled over the units of each class, and over all under the key None."""
    laws = {}
    for wanted in {classes(unit.pathways[0]) for unit in units} | {None}:
        chosen = [u for u in units if wanted in (None, classes(u.pathways[0]))]
        rows = [(u, w, *_target(w.recording)) for u in chosen for w in u.windows]
        histograms = [u.histogram(w) / u.histogram(w).sum() for u, w, *_ in rows]
        weights = np.array([min(n, 1000) for *_, n in rows], float)
        mixed = np.zeros(max(h.size for h in histograms))
        for histogram, weight in zip(histograms, weights, strict=True):
            mixed[: histogram.size] += weight * histogram
        probability = np.average([p for *_, p, _ in rows], weights=weights)
        t1 = _pooled_t1(chosen, classes, None)
        law = match(mixed, float(probability), t1_given=t1 or 0.0).law
        laws[wanted] = law
    return laws


def fit_pathways(
    is_excitatory: Sequence[bool], windows: Sequence[Window]
) -> WiringFit | None:
    """Fit the laws of all pathways to the recordings.

    Parameters
    ----------
    is_excitatory : sequence of bool
        By cell type.
    windows : sequence of Window
        Every recording; those with ``use: audit`` are reported, not fitted.

    Returns
    -------
    WiringFit or None
        None when no row that is to be fitted gives a probability.
    """
    units = _units(windows)
    if not units:
        return None

    def classes(pathway: Pathway) -> tuple[bool, bool]:
        return bool(is_excitatory[pathway[0]]), bool(is_excitatory[pathway[1]])

    told = [
        unit
        for unit in units
        if any(w.recording.synapses_mean is not None for w in unit.windows)
    ]
    for unit in [*told, *(u for u in units if u not in told)]:
        t1 = _pooled_t1(told, classes, classes(unit.pathways[0]))
        t1 = _pooled_t1(told, classes, None) if t1 is None else t1
        if unit not in told:
            unit.notes.append(
                "synapse number taken from like pathways"
                if told
                else "no row tells of synapses: every subset of sites weighs the same"
            )
        fit = _fit_one_row if len(unit.windows) == 1 else _fit_many_rows
        fit(unit, t1 or 0.0)
        unit.interval = _interval(unit)
    return _collect(len(is_excitatory), units, windows, classes)


def _collect(types_n: int, units, windows, classes) -> WiringFit:
    pooled = _class_laws(units, classes)
    laws, low, high, recorded = {}, {}, {}, {}
    for pathway in np.ndindex(types_n, types_n):
        laws[pathway] = pooled.get(classes(pathway), pooled[None])
        low[pathway] = high[pathway] = np.nan
        recorded[pathway] = False
    for unit in units:
        for pathway in unit.pathways:
            laws[pathway], recorded[pathway] = unit.law, True
            low[pathway], high[pathway] = unit.interval
    rows = tuple(_row_fit(window, units, laws) for window in windows)
    return WiringFit(laws, low, high, recorded, rows)


def _unused(recording: Recording) -> list[str]:
    """Say which measurements of a row the fit does not use yet."""
    notes = []
    if recording.slice_thickness_um is not None:
        notes.append("slice not used yet: fitted as if nothing were cut")
    if recording.reciprocal_tested_n is not None:
        notes.append("reciprocal counts not used yet")
    return notes


def _row_fit(window: Window, units: Sequence[_Unit], laws) -> RowFit:
    """Pool the laws of a row's pathways over its window."""
    total, p, first, second = 0.0, 0.0, 0.0, 0.0
    for pathway, histogram in window.histograms.items():
        if histogram.sum():
            found, n = moments(histogram, laws[pathway]), float(histogram.sum())
            total += n
            p += n * found.probability
            if found.probability > 0:
                first += n * found.probability * found.mean
                second += n * found.probability * (found.sd**2 + found.mean**2)
    sampled = {p for p, histogram in window.histograms.items() if histogram.sum()}
    mine = [u for u in units if window in u.windows]
    notes = list(dict.fromkeys(note for unit in mine for note in unit.notes))
    notes += _unused(window.recording)
    if not total:
        return RowFit(
            window, Moments(np.nan, np.nan, np.nan), False, "no pair in window"
        )
    if window.recording.use == "audit":
        notes = ["kept out of the fit", *_unused(window.recording)]
    elif window.recording.measured_probability is None:
        notes.append("no probability measured: not used in the fit")
    elif sampled - {p for u in mine for p in u.pathways}:
        notes.append("members with rows of their own keep their own law")
    mean = first / p if p else np.nan
    sd = float(np.sqrt(max(second / p - mean**2, 0.0))) if p else np.nan
    feasible = all(unit.feasible for unit in mine)
    return RowFit(window, Moments(p / total, mean, sd), feasible, "; ".join(notes))
