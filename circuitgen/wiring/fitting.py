"""The laws of all pathways from the recordings, each pathway by its own rows.

A pathway's own recordings alone set its law: one row is met exactly, several rows of
one pathway by largest likelihood. Rows of groups set one law for those of their
pathways that have no probability of their own. What a pathway's rows leave open, and
pathways without any, takes the law of largest likelihood over all rows of the same
class (excitatory or inhibitory, before and after), or over all rows.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from circuitgen.wiring.intervals import wilson_interval
from circuitgen.wiring.law import Histogram, log_ways, moments
from circuitgen.wiring.likelihood import (
    Datum,
    fit_jointly,
    fit_with_spread,
    reference_odds,
)
from circuitgen.wiring.match import find_t0, infeasible_targets, match
from circuitgen.wiring.pathway_laws import PathwayLaws, RowFit

# A probability or a mean without counts is exact for its own pathway ...
_EXACT_N = 1e9
# ... and weighs as much as a usual experiment where pathways are pooled.
_USUAL_PAIRS_N = 100.0
_USUAL_CONNECTIONS_N = 10.0
# Rows of equal synapse numbers would otherwise have an error of nothing.
_LEAST_SD = 0.25

Pathway = tuple[int, int]


@dataclass(frozen=True)
class _Row:
    """One recording with its pathways and its window's dense histograms."""

    recording: object
    pathways: tuple[Pathway, ...]
    histograms: dict[Pathway, np.ndarray]

    @property
    def probability(self) -> float | None:
        recording = self.recording
        if recording.tested_n is None:
            return recording.probability
        return recording.connected_n / recording.tested_n

    @property
    def is_single(self) -> bool:
        return len(self.pathways) == 1

    def histogram(self, pathways=None) -> Histogram | None:
        """Sum over some or all of the row's pathways; None where no pair touches."""
        chosen = self.pathways if pathways is None else pathways
        parts = [self.histograms[each] for each in chosen if each in self.histograms]
        dense = np.zeros(max((part.size for part in parts), default=0))
        for part in parts:
            dense[: part.size] += part
        return Histogram.of(dense) if dense[1:].any() else None

    def datum(self, histogram: Histogram, *, pooled: bool) -> Datum:
        """Return what the likelihood needs to know of the row."""
        given = self.recording
        exact_n = _USUAL_PAIRS_N if pooled else _EXACT_N
        tested_n = 0.0 if self.probability is None else given.tested_n or exact_n
        connected_n = tested_n * (self.probability or 0.0)
        if given.synapses_mean is None:
            return Datum(histogram, tested_n, connected_n)
        pairs_n = given.synapses_pairs_n or given.connected_n
        pairs_n = pairs_n or (_USUAL_CONNECTIONS_N if pooled else _EXACT_N)
        # A spread that nobody gave is taken as that of a Poisson number.
        sd = given.synapses_sd
        error_sd = np.sqrt(given.synapses_mean) if sd is None else max(sd, _LEAST_SD)
        return Datum(
            histogram,
            tested_n,
            connected_n,
            given.synapses_mean,
            error_sd / np.sqrt(pairs_n),
            np.nan if sd is None else sd,
        )


@dataclass(frozen=True)
class _Law:
    """A law with its interval, what it rests on, and what to note on its rows."""

    t0: float
    t1: float
    t2: float = 0.0
    t0_low: float = np.nan
    t0_high: float = np.nan
    recorded: bool = False
    basis: str = ""
    note: str = ""


class _Pools:
    """Laws of largest likelihood over all rows of a class, and over all rows."""

    def __init__(self, excitatory: np.ndarray, rows: Sequence[_Row]):
        self.excitatory = excitatory
        used = [row for row in rows if row.probability is not None and row.histogram()]
        self.everything = _pool(used, 0.0, "all pathways")
        classes = {self.class_of(row.pathways) for row in used} - {None}
        self.by_class = {
            each: _pool(
                [row for row in used if self.class_of(row.pathways) == each],
                self.everything.t1,
                " to ".join("excitatory" if sign else "inhibitory" for sign in each),
            )
            for each in classes
        }

    def class_of(self, pathways: Sequence[Pathway]) -> tuple[bool, bool] | None:
        """Return the class that all of these pathways share, or None."""
        classes = {tuple(bool(self.excitatory[i]) for i in each) for each in pathways}
        return classes.pop() if len(classes) == 1 else None

    def law(self, pathways: Sequence[Pathway]) -> _Law:
        """Return the law that pathways without recordings take."""
        return self.by_class.get(self.class_of(pathways), self.everything)


def _pool(rows: Sequence[_Row], t1: float, name: str) -> _Law:
    if not rows:
        # Largest entropy without any measurement: every subset is equally likely.
        return _Law(0.0, 0.0, basis="no recordings: every subset equally likely")
    data = [row.datum(row.histogram(), pooled=True) for row in rows]
    tested_n = sum(datum.tested_n for datum in data)
    if not any(datum.connected_n for datum in data):
        # None found among a few pairs does not rule connections out elsewhere: half
        # a connection (Jeffreys's rule), spread over the rows.
        data = [
            Datum(each.histogram, each.tested_n, 0.5 * each.tested_n / tested_n)
            for each in data
        ]
    held = None if any(datum.has_mean for datum in data) else t1
    return _Law(*fit_jointly(data, t1=held), basis=f"pooled over {name}")


def _fit_rows(
    rows: Sequence[_Row], histograms: Sequence[Histogram], pool: _Law
) -> tuple[_Law, bool]:
    """Return the law of some rows of the same pathways, and whether it is feasible.

    What the rows leave open comes from `pool`.
    """
    parts = zip(rows, histograms, strict=True)
    data = [row.datum(part, pooled=False) for row, part in parts]
    if not any(datum.tested_n for datum in data):
        eta = pool.t0 + reference_odds(pool.t1, pool.t2)[0]
        basis = f"synapses from its recordings, probability {pool.basis}"
        return _Law(*_most_likely(data, pool, eta), basis=basis), True
    note, feasible = "", True
    if len(rows) == 1:
        given = rows[0].recording
        synapses = given.synapses_mean, given.synapses_sd
        met = match(histograms[0], rows[0].probability, *synapses, t1=pool.t1)
        law, note, feasible = (met.t0, met.t1, met.t2), met.note, met.feasible
    elif not any(datum.connected_n for datum in data):
        law = (-np.inf, pool.t1, 0.0)
    else:
        law = _most_likely(data, pool)
    low, high = _interval(rows, histograms, law)
    is_own = all(row.is_single for row in rows)
    basis = "recordings of the pathway" if is_own else "recordings of groups"
    return _Law(*law, low, high, recorded=True, basis=basis, note=note), feasible


def _most_likely(data: Sequence[Datum], pool: _Law, eta=None):
    """Return t0, t1 and t2 of largest likelihood; t1 from `pool` without a mean."""
    if any(np.isfinite(datum.synapses_sd) for datum in data):
        return fit_with_spread(data, eta=eta)
    has_mean = any(datum.has_mean for datum in data)
    return (*fit_jointly(data, eta=eta, t1=None if has_mean else pool.t1), 0.0)


def _interval(rows, histograms, law) -> tuple[float, float]:
    """Return t0 at the ends of the 95 % interval of all counts together.

    NaN unless every probability came with counts.
    """
    counted = [
        (row.recording, part)
        for row, part in zip(rows, histograms, strict=True)
        if row.probability is not None
    ]
    if any(given.tested_n is None for given, _ in counted):
        return np.nan, np.nan
    tested_n = sum(given.tested_n for given, _ in counted)
    connected_n = sum(given.connected_n for given, _ in counted)
    dense = np.zeros(int(max(part.a[-1] for _, part in counted)) + 1)
    for given, part in counted:
        dense[part.a.astype(int)] += part.share * given.tested_n / tested_n
    a = np.flatnonzero(dense)
    mixed = Histogram(a.astype(float), dense[a])
    log_sum = log_ways(a, law[1], law[2])
    low, high = wilson_interval(connected_n, tested_n)
    return find_t0(mixed, log_sum, low), find_t0(mixed, log_sum, high)


class _Fitter:
    """All rows of a circuit, sorted by what they say about which pathway."""

    def __init__(self, excitatory, rows: Sequence[_Row]):
        self.rows = rows
        self.used = [
            index
            for index, row in enumerate(rows)
            if row.recording.use == "fit"
            and (row.probability, row.recording.synapses_mean) != (None, None)
            and row.histogram()
        ]
        self.pools = _Pools(excitatory, [rows[index] for index in self.used])
        self.own = {
            rows[index].pathways[0]
            for index in self.used
            if rows[index].is_single and rows[index].probability is not None
        }
        self.matched: dict[int, tuple[str, bool]] = {}
        self.laws = self._fit_all()

    def law(self, pathway: Pathway) -> _Law:
        """Return the law of a pathway, recorded or not."""
        return self.laws.get(pathway) or self.pools.law([pathway])

    def _members(self, index: int) -> tuple[Pathway, ...]:
        """Return the pathways that a row sets the law of, if any row does."""
        row = self.rows[index]
        if row.is_single:
            return row.pathways
        return tuple(each for each in row.pathways if each not in self.own)

    def _fit_all(self) -> dict[Pathway, _Law]:
        sources: dict[Pathway, list[int]] = {}
        for index in self.used:
            members = self._members(index)
            if self.rows[index].histogram(members):
                for pathway in members:
                    sources.setdefault(pathway, []).append(index)
        shared: dict[tuple[int, ...], list[Pathway]] = {}
        for pathway, indices in sources.items():
            shared.setdefault(tuple(indices), []).append(pathway)
        laws = {}
        for indices, pathways in shared.items():
            rows = [self.rows[index] for index in indices]
            parts = [self.rows[i].histogram(self._members(i)) for i in indices]
            law, feasible = _fit_rows(rows, parts, self.pools.law(pathways))
            if len(indices) == 1 and law.recorded:
                self.matched[indices[0]] = law.note, feasible
            laws |= dict.fromkeys(pathways, law)
        return laws

    def report(self, index: int) -> RowFit:
        """Return what the laws give for a row, and what is to say about it."""
        row = self.rows[index]
        probability, mean, sd = self._fitted(row)
        note, feasible = self.matched.get(index) or _feasibility(row)
        notes = [note, *self._remarks(index)]
        if feasible and row.recording.use == "fit":
            notes.append(_outside(row, probability))
        text = "; ".join(each for each in notes if each)
        return RowFit(probability, mean, sd, feasible, text)

    def _fitted(self, row: _Row) -> tuple[float, float, float]:
        pairs = connections = synapses = squares = 0.0
        for pathway, dense in row.histograms.items():
            if not dense.any():
                continue
            law = self.law(pathway)
            now = moments(dense, law.t0, law.t1, law.t2)
            pairs += dense.sum()
            if now.probability > 0:
                connected = dense.sum() * now.probability
                connections += connected
                synapses += connected * now.synapses_mean
                squares += connected * (now.synapses_sd**2 + now.synapses_mean**2)
        if not connections:
            return (0.0 if pairs else np.nan), np.nan, np.nan
        mean = synapses / connections
        variance = max(squares / connections - mean**2, 0.0)
        return float(connections / pairs), float(mean), float(np.sqrt(variance))

    def _remarks(self, index: int) -> list[str]:
        row, remarks = self.rows[index], []
        given = row.recording
        if given.use != "fit":
            remarks.append("kept out of the fit")
        elif not row.is_single and (own := sum(p in self.own for p in row.pathways)):
            remarks.append(
                f"{own} of its {len(row.pathways)} pathways have recordings of their "
                "own, which set their laws"
            )
        is_met = index in self.used and row.probability is not None
        if is_met and not any(self._says_synapses(each) for each in row.pathways):
            pool = self.pools.law(row.pathways)
            remarks.append(f"no number of synapses recorded: t1 {pool.basis}")
        if index not in self.matched and any(
            self.law(each).t2 > 0 for each in row.pathways
        ):
            remarks.append("its recorded spread needs a law of two humps")
        if given.slice_thickness_um is not None:
            remarks.append("the cut of the slice is not modelled: pairs count as whole")
        return remarks

    def _says_synapses(self, pathway: Pathway) -> bool:
        return any(
            self.rows[index].recording.synapses_mean is not None
            for index in self.used
            if pathway in self._members(index)
        )


def _feasibility(row: _Row) -> tuple[str, bool]:
    """Return what the circuit cannot give of a row's numbers, and whether it can."""
    if not any(dense.any() for dense in row.histograms.values()):
        return "the circuit has no such pair", False
    histogram, given = row.histogram(), row.recording
    if histogram is None:
        note = "no such pair of the circuit has an apposition"
        return note, not (row.probability or given.synapses_mean)
    # A mean alone is possible if it is possible for the fewest connections.
    targets = row.probability or 0.0, given.synapses_mean, given.synapses_sd
    notes = infeasible_targets(histogram, *targets)
    return "; ".join(notes), not notes


def _outside(row: _Row, probability: float) -> str:
    """Return a note if a fitted probability lies outside the interval of the counts."""
    given = row.recording
    if given.tested_n is None or np.isnan(probability):
        return ""
    low, high = wilson_interval(given.connected_n, given.tested_n)
    if low <= probability <= high:
        return ""
    return (
        f"fitted outside the 95 % interval {low:.3g} to {high:.3g} of the counts: "
        "other recordings of the same pathways disagree"
    )


def fit_pathways(
    excitatory,
    recordings: Sequence,
    row_pathways: Sequence[Sequence[Pathway]],
    window_histograms: Mapping[tuple[int, int, int], np.ndarray],
    whole_histograms: Mapping[Pathway, np.ndarray],
) -> PathwayLaws:
    """Find the law of every ordered pair of cell types.

    Parameters
    ----------
    excitatory : bool (types_n,)
        Whether each cell type is excitatory.
    recordings : sequence
        Rows with the attributes of `circuitgen.spec.Recording`.
    row_pathways : sequence of sequences of (int, int)
        Pathways of each row: presynaptic and postsynaptic type.
    window_histograms : mapping of (row, pre, post) to array
        Pairs of a pathway that a row's protocol could draw, counted by their number of
        appositions, from 0; rows are counted from 0 in the order of `recordings`.
    whole_histograms : mapping of (pre, post) to array
        The same for all pairs of each pathway.

    Returns
    -------
    PathwayLaws
        Without any recording every subset of appositions is equally likely (t0 = t1 =
        0), the law of largest entropy, and no pathway counts as recorded.
    """
    rows = [
        _Row(recording, tuple(pathways), _windows(window_histograms, index, pathways))
        for index, (recording, pathways) in enumerate(
            zip(recordings, row_pathways, strict=True)
        )
    ]
    fitter = _Fitter(np.asarray(excitatory, dtype=bool), rows)
    types_n = len(excitatory)
    laws = [[fitter.law((i, j)) for j in range(types_n)] for i in range(types_n)]
    ceiling = np.full((types_n, types_n), np.nan)
    for pathway, counts in whole_histograms.items():
        if np.any(counts):
            ceiling[pathway] = 1 - counts[0] / np.sum(counts)
    names = ("t0", "t1", "t2", "t0_low", "t0_high", "recorded", "basis")
    return PathwayLaws(
        **{name: _square(laws, name) for name in names},
        p_ceiling=ceiling,
        rows=tuple(fitter.report(index) for index in range(len(rows))),
    )


def _windows(window_histograms, index, pathways) -> dict[Pathway, np.ndarray]:
    found = {each: window_histograms.get((index, *each)) for each in pathways}
    return {each: np.asarray(h, float) for each, h in found.items() if h is not None}


def _square(laws: list[list[_Law]], name: str) -> np.ndarray:
    return np.array([[getattr(law, name) for law in row] for row in laws])
