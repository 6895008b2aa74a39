"""From recordings and a circuit to verdicts, with false alarms under control."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.stats import false_discovery_control

from circuitgen.audit.circuit import AuditCircuit
from circuitgen.audit.degrees import DegreeSpread, compare_spread
from circuitgen.audit.experiment import Experimenter, Found
from circuitgen.audit.graph import CLASSES
from circuitgen.audit.row_tests import (
    Shares,
    detectable_ratio,
    mean_p_value,
    place_of,
    ratio_interval,
    two_sided,
)
from circuitgen.audit.triads import TriadCount, class_shares, draw_triples, null_shares
from circuitgen.core.errors import InputError, Problem
from circuitgen.run import Protocol, slice_of
from circuitgen.spec import Recording

LEVEL = 0.05
# A row that would not find the circuit off by this factor cannot tell.
FACTOR_THAT_COUNTS = 3.0
VERDICTS = ("agrees", "too high", "too low", "cannot tell")


@dataclass
class Judgement:
    """One measure of one recording against the circuit.

    `circuit` and `measured` are shares, or numbers of synapses; `direction` is how the
    circuit differs (``too high``, ``too low``); `detectable` the smallest ratio of the
    measured to the circuit's that the row finds with 80 % power, None where none.
    """

    row: int
    source: str
    pre_type: str
    post_type: str
    use: str
    measure: str
    tested_n: int
    measured: float
    circuit: float
    expected_low: float | None
    expected_high: float | None
    ratio: float | None
    ratio_low: float | None
    ratio_high: float | None
    design_effect: float
    p_value: float | None
    direction: str
    note: str = ""
    detectable: float | None = None
    q_value: float | None = None
    verdict: str = "cannot tell"


def protocol_of_row(circuit: AuditCircuit, recording: Recording) -> Protocol:
    """Return a recording's protocol in a circuit's numbers of types."""
    low, high = recording.window_um()
    return Protocol(
        circuit.members(recording.pre_type),
        circuit.members(recording.post_type),
        low,
        high,
        recording.distance_kind == "lateral",
        slice_of(recording),
        recording.row,
    )


def check_rows(circuit: AuditCircuit, recordings: Sequence[Recording]) -> None:
    """Refuse rows that the circuit cannot be asked about, all at once."""
    problems = []
    for recording in recordings:
        place = (recording.file, recording.line)
        low, high = recording.window_um()
        if not circuit.has_positions and (low > 0 or recording.distance_high_um):
            rule = "needs the places of the somata: x_um, y_um, z_um in the cells"
            problems.append(Problem(*place, "distance_high_um", rule))
    if problems:
        raise InputError(problems)


def _plain(recording: Recording, measure: str, **values) -> Judgement:
    return Judgement(
        recording.row,
        recording.source,
        recording.pre_type,
        recording.post_type,
        recording.use,
        measure,
        **values,
    )


def _share(recording: Recording, measure: str, k: int, n: int, shares: Shares):
    """Judge a counted share."""
    distribution = shares.predictive(n)
    place = place_of(k, distribution)
    ratio, low, high = ratio_interval(shares, k, n)
    return _plain(
        recording,
        measure,
        tested_n=n,
        measured=k / n,
        circuit=shares.p,
        expected_low=float(distribution.ppf(0.025)) / n,
        expected_high=float(distribution.ppf(0.975)) / n,
        ratio=ratio,
        ratio_low=low,
        ratio_high=high,
        design_effect=shares.design_effect,
        p_value=two_sided(place),
        direction="too high" if place < 0.5 else "too low",
    )


def _untested(recording: Recording, measure: str, n: int, measured: float, note: str):
    nothing = dict.fromkeys(
        ("expected_low", "expected_high", "ratio", "ratio_low", "ratio_high", "p_value")
    )
    return _plain(
        recording, measure, tested_n=n, measured=measured, circuit=float("nan"),
        design_effect=1.0, direction="", note=note, **nothing,
    )  # fmt: skip


def _synapses(recording: Recording, found: Found) -> Judgement | None:
    """Judge the mean number of synapses per connection."""
    n = recording.synapses_pairs_n
    if recording.synapses_mean is None or n is None:
        return None
    measure, mean = "synapses per connection", recording.synapses_mean
    if not found.connected_n:
        return _untested(recording, measure, n, mean, "no connection in the window")
    if found.synapses_mean != found.synapses_mean:
        return _untested(
            recording, measure, n, mean, "the circuit has no synapse numbers"
        )
    return _plain(
        recording,
        measure,
        tested_n=n,
        measured=mean,
        circuit=found.synapses_mean,
        expected_low=None,
        expected_high=None,
        ratio=found.synapses_mean / mean,
        ratio_low=None,
        ratio_high=None,
        design_effect=1.0,
        p_value=mean_p_value(
            mean,
            recording.synapses_sd,
            n,
            found.synapses_mean,
            found.synapses_sd,
            found.connected_n,
        ),
        direction="too high" if found.synapses_mean > mean else "too low",
    )


def judge_row(
    recording: Recording, found: Found, in_slice: tuple[float, float] | None
) -> list[tuple[Judgement, Shares | None]]:
    """Judge everything that a row measured.

    `in_slice` (connected, pairs) stands for the counts where the row has a slice.
    """
    out: list[tuple[Judgement, Shares | None]] = []
    n, k = recording.tested_n, recording.connected_n
    connected, pairs = in_slice or (found.connected_n, found.pairs_n)
    if n is not None:
        measure = "connection probability"
        if pairs <= 0:
            note = "no pair in the window"
            out.append((_untested(recording, measure, n, k / n, note), None))
        else:
            shares = Shares(connected, pairs, found.design_effect)
            out.append((_share(recording, measure, k, n, shares), shares))
    elif recording.probability is not None:
        note = "a probability without counts cannot be tested"
        out.append(
            (
                _untested(
                    recording, "connection probability", 0, recording.probability, note
                ),
                None,
            )
        )
    n, k = recording.reciprocal_tested_n, recording.reciprocal_connected_n
    if n is not None and found.dyads_n > 0:
        shares = Shares(found.both_n, found.dyads_n)
        out.append((_share(recording, "reciprocal share", k, n, shares), shares))
    synapses = _synapses(recording, found)
    return [*out, (synapses, None)] if synapses else out


def _judge_triads(
    circuit: AuditCircuit, counted: TriadCount
) -> list[tuple[Judgement, Shares | None]]:
    """Judge counted triads class by class; notes tell shares by distance alone."""
    recording = Recording.model_construct(
        row=counted.row,
        source=counted.source,
        pre_type=counted.types,
        post_type=counted.types,
        use="audit",
    )
    triples = draw_triples(circuit, counted)
    found = class_shares(circuit, triples) if len(triples) else np.zeros(16)
    null = null_shares(circuit, triples) if len(triples) else np.zeros(16)
    out: list[tuple[Judgement, Shares | None]] = []
    for name, k in counted.counts.items():
        measure, place = f"triads {name}", CLASSES.index(name)
        if not len(triples):
            note, share = "no three cells within the window", k / counted.total
            row = _untested(recording, measure, counted.total, share, note)
            out.append((row, None))
            continue
        shares = Shares(int(found[place]), len(triples))
        judged = _share(recording, measure, k, counted.total, shares)
        judged.note = f"by distance alone {null[place]:.3g}"
        out.append((judged, shares))
    return out


def _judge_degrees(circuit: AuditCircuit, measured: DegreeSpread) -> Judgement:
    """Judge a spread of degrees; the note tells the spread by chance."""
    recording = Recording.model_construct(
        row=measured.row,
        source=measured.source,
        pre_type=measured.types,
        post_type=measured.types,
        use="audit",
    )
    measure, n = f"{measured.direction}-degree spread", measured.cells_n
    found = compare_spread(circuit, measured)
    if found is None:
        note = "too few connected cells of the type"
        return _untested(recording, measure, n, measured.variation, note)
    return _plain(
        recording,
        measure,
        tested_n=n,
        measured=measured.variation,
        circuit=found.variation,
        expected_low=None,
        expected_high=None,
        ratio=found.variation / measured.variation if measured.variation else None,
        ratio_low=None,
        ratio_high=None,
        design_effect=1.0,
        p_value=found.p_value,
        direction="too high" if found.variation > measured.variation else "too low",
        note=f"by chance {found.by_chance:.3g}",
    )


def audit(
    circuit: AuditCircuit,
    recordings: Sequence[Recording],
    slice_counts: Callable[[Protocol], tuple[float, float] | None] | None = None,
    triads: Sequence[TriadCount] = (),
    degrees: Sequence[DegreeSpread] = (),
) -> list[Judgement]:
    """Hold a circuit against recordings.

    Parameters
    ----------
    circuit : AuditCircuit
    recordings : sequence of Recording
    slice_counts : callable, optional
        Gives (connected, pairs) of a protocol with a slice, None where it cannot.
    triads : sequence of TriadCount
        Counts of triad classes.
    degrees : sequence of DegreeSpread
        Measured spreads of degrees.

    Returns
    -------
    list of Judgement
        q-values and verdicts hold among the rows of the same use: those that were kept
        out of the fit, and those that entered it.
    """
    check_rows(circuit, recordings)
    experimenter, judged = Experimenter(circuit), []
    for recording in recordings:
        protocol = protocol_of_row(circuit, recording)
        found = experimenter.run(protocol, recording.cluster_size)
        in_slice = None
        if protocol.cut is not None:
            in_slice = slice_counts(protocol) if slice_counts else None
            if in_slice is None:
                note = "slices need a run whose reconstructions are where they were"
                n = recording.tested_n or 0
                measured = recording.measured_probability or 0.0
                judged.append((_untested(recording, "connection probability", n,
                                         measured, note), None))  # fmt: skip
                continue
        judged += judge_row(recording, found, in_slice)
    for counted in triads:
        judged += _judge_triads(circuit, counted)
    judged += [(_judge_degrees(circuit, measured), None) for measured in degrees]
    for use in ("audit", "fit"):
        _conclude([pair for pair in judged if pair[0].use == use])
    return [judgement for judgement, _ in judged]


def _conclude(judged: list[tuple[Judgement, Shares | None]]) -> None:
    """Give q-values (Benjamini & Hochberg 1995) and verdicts to rows of one use."""
    tested = [pair for pair in judged if pair[0].p_value is not None]
    if not tested:
        return
    q_values = false_discovery_control([judgement.p_value for judgement, _ in tested])
    # Alone among rows that agree, a row is flagged at this level of its own.
    own_level = LEVEL / len(tested)
    for (judgement, shares), q_value in zip(tested, q_values, strict=True):
        judgement.q_value = float(q_value)
        if shares is not None and shares.p > 0.0:
            judgement.detectable = detectable_ratio(
                shares, judgement.tested_n, own_level
            )
        if q_value < LEVEL:
            judgement.verdict = judgement.direction
        elif shares is None or (judgement.detectable or 1e9) <= FACTOR_THAT_COUNTS:
            judgement.verdict = "agrees"


def overall(judged: Sequence[Judgement]) -> dict[str, object]:
    """Count verdicts of the rows that were kept out of the fit (of all, if none was)."""
    apart = [j for j in judged if j.use == "audit"] or list(judged)
    counts = {verdict: sum(j.verdict == verdict for j in apart) for verdict in VERDICTS}
    disagree = counts["too high"] + counts["too low"]
    tested = sum(j.p_value is not None for j in apart)
    return {
        "measures": len(apart),
        "agree": counts["agrees"],
        "disagree": disagree,
        "cannot_tell": counts["cannot tell"],
        "tested": tested,
        # Of those flagged, Benjamini and Hochberg's rule lets this many be false.
        "expected_false_alarms": round(LEVEL * disagree, 3),
    }
