"""Laws of all pathways from the recordings, each under its own protocol.

All recordings enter one likelihood with their sample sizes; pathways share strength
through the pooled model, so that a pathway nobody recorded has a posterior too.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from circuitgen.wiring.evidence import Evidence
from circuitgen.wiring.gathering import (
    gather,
    is_usable,
    never_connects,
    target_counts,
)
from circuitgen.wiring.law import NEVER
from circuitgen.wiring.laws import Laws, Shown, laws_of, show
from circuitgen.wiring.match import match
from circuitgen.wiring.pooling import DRAWS_N, FEW_POINTS, Posterior, pool
from circuitgen.wiring.prior import make_design
from circuitgen.wiring.reciprocity import Reciprocity, fit_reciprocity
from circuitgen.wiring.window import BoutonTotal, Window

_CLOSE = 1e-12


@dataclass(frozen=True)
class RowFit:
    """What the laws make of one recording; `fitted` pools its pathways.

    `fitted` is of the law that the circuit is drawn with, `drawn` of all draws.
    """

    window: Window
    fitted: Shown
    drawn: Shown
    feasible: bool
    note: str


@dataclass(frozen=True)
class WiringFit:
    """The posterior of the laws of all pathways.

    Attributes
    ----------
    laws : Laws
        One draw: the law that the circuit is drawn with, the posterior mean of (eta,
        tau, t2) or, on demand, one posterior draw.
    draws : Laws
        Posterior draws.
    recorded : bool (pathways,)
        Pathways that a row with use: fit tells something about.
    rows : tuple of RowFit
        One for each recording, in order.
    reciprocity : Reciprocity
    warnings : tuple of str
        What is to be known about the fit as a whole.
    points_n, effective_points
        Points over the unknown spreads, and how many of them count.
    """

    laws: Laws
    draws: Laws
    recorded: np.ndarray
    rows: tuple[RowFit, ...]
    reciprocity: Reciprocity
    warnings: tuple[str, ...]
    points_n: int
    effective_points: float


def codes(window: Window, types_n: int) -> dict[int, np.ndarray]:
    """Return a window's histograms by pathway number."""
    return {pre * types_n + post: h for (pre, post), h in window.histograms.items()}


def _all_laws(
    posterior: Posterior, evidence: Evidence, pathways_n: int
) -> tuple[Laws, Laws]:
    """Return the mean laws and the draws, from the posterior's own coordinates."""
    units = evidence.pathways
    middle = np.zeros(pathways_n)
    middle[units] = evidence.middle
    out = []
    for eta, tau, bend in (
        (posterior.eta[None], posterior.tau[None], posterior.bend[None]),
        (posterior.eta_draws, posterior.tau_draws, posterior.bend_draws),
    ):
        t2 = np.zeros(eta.shape)
        # Only pathways whose spread was recorded are bent.
        t2[:, units[evidence.bent]] = bend[:, evidence.bent]
        out.append(laws_of(eta, tau, t2, middle))
    return out[0], out[1]


def _meet_exactly(laws: Laws, histograms, target: float) -> Laws:
    """Shift t0 of a row's pathways, draw by draw, so that it shows the target.

    Newton in the log odds of what it shows; the fit has come close already.
    """
    places = np.array(list(histograms))
    t0 = laws.t0.copy()
    ceiling = 1.0 - sum(float(h[..., 0].sum()) if h.ndim == 1 else 0.0
                        for h in histograms.values()) / sum(
        float(h.sum()) for h in histograms.values())  # fmt: skip
    shift, step = np.zeros(laws.draws_n), 1e-4
    for _ in range(50):
        now, near = (
            np.log(p) - np.log(ceiling - p)
            for p in (
                show(_shifted(laws, places, shift + more), histograms).probability
                for more in (0.0, step)
            )
        )
        wanted = np.log(target) - np.log(ceiling - target)
        move = np.clip((wanted - now) * step / np.maximum(near - now, 1e-12), -2.0, 2.0)
        shift = shift + move
        if np.abs(move).max() < _CLOSE * 1e3:
            break
    t0[:, places] += shift[:, None]
    return replace(laws, t0=t0)


def _shifted(laws: Laws, places, shift) -> Laws:
    t0 = laws.t0.copy()
    t0[:, places] += shift[:, None]
    return replace(laws, t0=t0)


def _settle(laws: Laws, windows: Sequence[Window], types_n: int) -> Laws:
    """Meet bare probabilities exactly, each pathway once; 0 means never."""
    settled: set[int] = set()
    for window in sorted(windows, key=lambda w: len(w.histograms)):
        recording, histograms = window.recording, codes(window, types_n)
        if recording.use != "fit" or recording.probability is None:
            continue
        if never_connects(window):
            t0 = laws.t0.copy()
            t0[:, list(histograms)] = NEVER
            laws, settled = replace(laws, t0=t0), settled | set(histograms)
        elif is_usable(window) and not settled & set(histograms):
            k, n = target_counts(window)
            laws, settled = (
                _meet_exactly(laws, histograms, k / n),
                settled | set(histograms),
            )
    return laws


def fit_pathways(
    is_excitatory: Sequence[bool],
    home_layer: Sequence[int],
    windows: Sequence[Window],
    totals: Sequence[BoutonTotal] = (),
    *,
    seed: int = 0,
    draw: int | None = None,
    draws_n: int = DRAWS_N,
) -> WiringFit:
    """Fit the laws of all pathways to the recordings.

    Parameters
    ----------
    is_excitatory, home_layer : sequences
        Sign and layer of every cell type.
    windows : sequence of Window
        Every recording; those with ``use: audit`` are reported, not fitted.
    totals : sequence of BoutonTotal
        Known bouton densities.
    seed : int
        Keys the posterior draws.
    draw : int, optional
        Draw the circuit with this posterior draw (from 1) rather than with the mean law.
    draws_n : int
        Posterior draws to keep.
    """
    types_n = len(is_excitatory)
    design = make_design(is_excitatory, home_layer)
    evidence = gather(windows, totals, types_n)
    posterior = pool(design, evidence, seed, draws_n)
    mean, draws = _all_laws(posterior, evidence, design.pathways_n)
    mean, draws = (_settle(laws, windows, types_n) for laws in (mean, draws))
    laws = mean if draw is None else draws.only(draw - 1)
    recorded = np.zeros(design.pathways_n, bool)
    for window in windows:
        if is_usable(window) and window.recording.measured_probability is not None:
            recorded[[c for c, h in codes(window, types_n).items() if h.sum()]] = True
    return WiringFit(
        laws,
        draws,
        recorded,
        tuple(_row_fit(window, laws, draws, types_n) for window in windows),
        fit_reciprocity(windows, laws, types_n),
        _warnings(windows, posterior),
        posterior.points_n,
        posterior.effective_points,
    )


def _warnings(windows: Sequence[Window], posterior: Posterior) -> tuple[str, ...]:
    used = [window for window in windows if is_usable(window)]
    if not used:
        return (
            "no recording enters the fit: laws come from the prior alone and their"
            " intervals are wide",
        )
    if posterior.effective_points < FEW_POINTS:
        return (
            f"only {posterior.effective_points:.1f} of {posterior.points_n} points over"
            " the spreads between pathways count: intervals may be too narrow",
        )
    return ()


def _row_fit(window: Window, laws: Laws, draws: Laws, types_n: int) -> RowFit:
    """Return what mean law and draws show under a row's protocol."""
    histograms = codes(window, types_n)
    fitted, drawn = show(laws, histograms), show(draws, histograms)
    if not window.pairs_n:
        return RowFit(window, fitted, drawn, feasible=False, note="no pair in window")
    feasible, notes = _reach(window)
    if window.recording.use == "audit":
        feasible, notes = True, ["kept out of the fit"]
    elif len(window.histograms) > 1:
        notes.append(f"pools {len(window.histograms)} pathways")
    return RowFit(window, fitted, drawn, feasible=feasible, note="; ".join(notes))


def _reach(window: Window) -> tuple[bool, list[str]]:
    """Say whether any law meets a row's numbers, and if not what could be met."""
    recording, ceiling = window.recording, window.ceiling()
    p = recording.measured_probability
    if ceiling <= 0.0:
        note = (
            "no pair under the protocol has an apposition: probability 0 is all there is"
        )
        return p in (None, 0.0), [note]
    if p is not None and p > ceiling:
        return False, [f"probability {p:.4g} is out of reach: at most {ceiling:.4g}"]
    if window.is_cut or p is None:
        return True, []
    k, n = recording.connected_n, recording.tested_n
    # None or all connected: no sample establishes 0 or 1.
    inside = (k + 0.5) / (n + 1) if n and k in (0, n) else p
    found = match(
        window.histogram(),
        min(inside, ceiling),
        recording.synapses_mean,
        recording.synapses_sd,
    )
    return found.feasible, [found.note] if found.note else []
