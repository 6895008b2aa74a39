"""From recordings with their pairs to the evidence that the likelihood reads."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from circuitgen.wiring.evidence import EXACT_N, Evidence
from circuitgen.wiring.law import moments
from circuitgen.wiring.match import match
from circuitgen.wiring.observation import Entries, make_entries
from circuitgen.wiring.window import BoutonTotal, Window, entries_of

# About this many synapses a spread bends the law where no mean was recorded.
_MIDDLE = 2.0
# A measured spread of nothing would be an observation without any error.
_LEAST_SD = 0.05


def is_usable(window: Window) -> bool:
    """Whether a row enters the fit: wanted there, and some of its pairs may connect."""
    return window.recording.use == "fit" and window.ceiling() > 0.0


def never_connects(window: Window) -> bool:
    """Whether a row says that there is no connection ever: probability 0, no counts."""
    recording = window.recording
    return recording.use == "fit" and recording.probability == 0.0


def in_order(windows: Sequence[Window]) -> list[Window]:
    """Sort recordings by what they say, so that their order in a file is no matter."""

    def content(window: Window) -> tuple:
        recording = window.recording
        numbers = [
            -1.0 if value is None or isinstance(value, str) else float(value)
            for name, value in recording
            if name not in ("row", "line", "file", "source", "pre_type", "post_type")
        ]
        return (sorted(window.pathways), numbers)

    return sorted(windows, key=content)


def target_counts(window: Window) -> tuple[float, float]:
    """Return connected and tested pairs of a row, or what stands for a probability.

    A probability out of reach is taken to just under the ceiling (and reported).
    """
    recording = window.recording
    if recording.tested_n is not None:
        return float(recording.connected_n), float(recording.tested_n)
    p = min(recording.probability, window.ceiling() * (1 - 1e-6), 1 - 1e-9)
    return p * EXACT_N, float(EXACT_N)


def _mean_error(window: Window, sample: int) -> float:
    """Return the standard error of a recorded mean number of synapses.

    Without a recorded spread that of the law which meets the row is taken. Half a
    synapse is added to the sum of squares, or a few single synapses would mean that
    there is never more than one.
    """
    recording, sd = window.recording, window.recording.synapses_sd
    if sd is None:
        p = recording.measured_probability or 0.5 * window.ceiling()
        p = min(p, window.ceiling() * (1 - 1e-6))
        met = match(window.histogram(), p, recording.synapses_mean)
        sd = moments(window.histogram(), met.law).sd
    return float(np.sqrt((sd**2 + 0.5 / sample) / sample))


class _Collector:
    """Entries of rows, one after another."""

    def __init__(self, types_n: int):
        self._types_n = types_n
        self._parts: list[tuple[np.ndarray, ...]] = []
        self.rows_n = 0

    def add(self, histograms, total: float) -> int:
        """Add a row of pooled pairs; return its number."""
        for (pre, post), histogram in histograms.items():
            a, lost, weight = entries_of(histogram)
            row = np.full(a.size, self.rows_n)
            code = np.full(a.size, pre * self._types_n + post)
            self._parts.append((row, code, a, lost, weight / total))
        self.rows_n += 1
        return self.rows_n - 1

    def entries(self) -> tuple[Entries, np.ndarray]:
        """Return the entries and the codes of the pathways that they pool."""
        empty = (np.zeros(0, np.int64),) * 4 + (np.zeros(0),)
        parts = self._parts or [empty]
        columns = [np.concatenate(part) for part in zip(*parts, strict=True)]
        pathways, unit = np.unique(columns[1], return_inverse=True)
        columns[1] = unit.astype(np.int64)
        return make_entries(*columns, self.rows_n, pathways.size), pathways


def gather(
    windows: Sequence[Window], totals: Sequence[BoutonTotal], types_n: int
) -> Evidence:
    """Return the evidence of all usable rows and bouton densities."""
    rows = _Collector(types_n)
    counts, means, spreads, densities = [], [], [], []
    bends: dict[int, float] = {}
    for window in in_order(windows):
        if not is_usable(window) or never_connects(window):
            continue
        recording, row = window.recording, rows.add(window.histograms, window.pairs_n)
        if recording.measured_probability is not None:
            counts.append((row, *target_counts(window)))
        sample = recording.synapses_pairs_n or EXACT_N
        if recording.synapses_mean is not None:
            error = _mean_error(window, sample)
            means.append((row, recording.synapses_mean, error))
        if recording.synapses_sd is not None:
            spreads.append((row, max(recording.synapses_sd, _LEAST_SD), sample))
            for pre, post in window.pathways:
                bends[pre * types_n + post] = recording.synapses_mean or _MIDDLE
    for total in totals:
        if any(h[1:].any() for h in total.histograms.values()):
            row = rows.add(total.histograms, total.axon_um)
            error = total.sd_per_um / total.mean_per_um
            densities.append((row, np.log(total.mean_per_um), error))
    entries, pathways = rows.entries()
    return Evidence(
        entries,
        pathways,
        np.array([code in bends for code in pathways.tolist()], bool),
        np.array([bends.get(code, _MIDDLE) for code in pathways.tolist()]),
        *_columns(counts, 3),
        *_columns(means, 3),
        *_columns(spreads, 3),
        *_columns(densities, 3),
    )


def _columns(rows: list[tuple], columns_n: int) -> list[np.ndarray]:
    """Turn rows into columns, the first one of whole numbers."""
    table = np.array(rows, float).reshape(-1, columns_n)
    return [table[:, 0].astype(np.int64), *table[:, 1:].T]
