"""The order of the stages of a build."""

from __future__ import annotations

import json
import os
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from circuitgen.core.compilation import is_compiled
from circuitgen.core.errors import InputError, Problem
from circuitgen.core.progress import Progress, wrapped
from circuitgen.core.run_tables import FIT, PATHWAYS
from circuitgen.report import write_report
from circuitgen.run.circuit import Circuit, assemble, write_cells
from circuitgen.run.folder import PROVENANCE, RunFolder
from circuitgen.run.provenance import (
    Stopwatch,
    fingerprint,
    hash_inputs,
    write_provenance,
)
from circuitgen.run.results import fit_table, pathways_table, recordings_met
from circuitgen.run.sites import SiteStore
from circuitgen.run.windows import (
    Histograms,
    everything_protocol,
    protocol_of,
    take_histograms,
)
from circuitgen.run.wire import Wiring, join_edges, wire_all
from circuitgen.spec import Spec, load_spec
from circuitgen.wiring import WiringFit, fit_pathways, tabulate


@dataclass(frozen=True)
class Outcome:
    """What a build leaves behind: the folder and the numbers of its summary."""

    folder: Path
    summary: dict[str, object]
    built: bool


def _say(text: str) -> None:
    sys.stderr.write(f"{wrapped(text)}\n")


def _fit(circuit: Circuit, histograms: Histograms) -> WiringFit:
    spec = circuit.spec
    fit = fit_pathways([t.is_excitatory for t in spec.cell_types], histograms.windows)
    if fit is None:
        rule = (
            "no row with use: fit gives a connection probability for pairs that the"
            " circuit holds; at least one is needed"
        )
        raise InputError([Problem(str(spec.path), None, "recordings", rule)])
    return fit


def _make_wiring(circuit: Circuit, fit: WiringFit, histograms, folder: RunFolder):
    n = len(circuit.spec.cell_types)
    pathways = list(np.ndindex(n, n))
    most = max(histogram.size for histogram in histograms.everything.values())
    tables = tabulate(
        [fit.laws[pathway] for pathway in pathways],
        np.array([fit.t0_low[pathway] for pathway in pathways]),
        np.array([fit.t0_high[pathway] for pathway in pathways]),
        most,
    )
    protocols = [everything_protocol(circuit)]
    protocols += [protocol_of(circuit, row) for row in circuit.spec.recordings]
    return Wiring(circuit, tables, protocols, folder.unfinished, folder.work)


def _summarise(circuit: Circuit, histograms, realised, edges_n, fit_columns):
    pairs = np.array(
        [
            (h.sum(), h[1:].sum(), h @ np.arange(h.size))
            for h in histograms.everything.values()
        ]
    ).sum(axis=0)
    met, counted = recordings_met(fit_columns)
    return {
        "cells": circuit.cells.cells_n,
        "cell_types": len(circuit.spec.cell_types),
        "pairs": int(pairs[0]),
        "touching_pairs": int(pairs[1]),
        "appositions": int(pairs[2]),
        "appositions_per_cell": round(int(pairs[2]) / max(circuit.cells.cells_n, 1), 1),
        "appositions_per_touching_pair": round(int(pairs[2]) / max(int(pairs[1]), 1), 3),
        "connections": edges_n,
        "synapses": realised.synapses,
        "recordings_met": met,
        "recordings_with_counts": counted,
        "recordings_infeasible": sum(not ok for ok in fit_columns["feasible"]),
        "warnings": list(circuit.warnings),
        "repairs": list(circuit.repairs),
    }


def _write_all(spec: Spec, folder: RunFolder, threads: int, watch: Stopwatch) -> dict:
    """Run the stages that an earlier try has not finished; return the summary."""
    with watch.stage("cells"):
        circuit = assemble(spec)
        write_cells(circuit, folder.unfinished / "cells.parquet")
    for warning in circuit.warnings:
        _say(f"warning: {warning}")
    if circuit.repairs:
        _say(f"{len(circuit.repairs)} repairs to reconstructions: see provenance.json")
    store = SiteStore(circuit, folder.work)
    with watch.stage("appositions"):
        store.find_all(threads)
    with watch.stage("fit"), Progress("fitting recordings", 2) as progress:
        histograms = take_histograms(circuit, store.pairs())
        progress.advance()
        fit = _fit(circuit, histograms)
        progress.advance()
    wiring = _make_wiring(circuit, fit, histograms, folder)
    with watch.stage("wiring"):
        everything, *rows = wire_all(wiring, store, threads)
        edges_n = join_edges(wiring, len(store.bounds))
    columns = fit_table(fit, rows)
    FIT.write_csv(folder.unfinished / "fit.csv", columns)
    PATHWAYS.write_csv(
        folder.unfinished / "pathways.csv", pathways_table(circuit, fit, histograms)
    )
    return _summarise(circuit, histograms, everything, edges_n, columns)


def build(
    spec_path: Path, out: Path, *, force: bool = False, threads: int | None = None
) -> Outcome:
    """Build a circuit from a spec file into a run folder.

    A finished run of the very same spec, inputs and versions is left as it is; an
    unfinished one is continued.

    Parameters
    ----------
    spec_path : Path
        The spec file.
    out : Path
        The run folder; it appears when everything in it is done.
    force : bool
        Build again and replace whatever is at `out`.
    threads : int, optional
        Threads to use; the machine's cores by default. Results do not depend on it.

    Raises
    ------
    InputError, RunFolderError
        With one message that says what to mend.
    """
    spec, folder, watch = load_spec(spec_path), RunFolder(out), Stopwatch()
    inputs = hash_inputs(spec)
    mark = fingerprint(spec, inputs)
    if not force and folder.finished_fingerprint() == mark:
        stored = json.loads((folder.path / PROVENANCE).read_text(encoding="utf-8"))
        return Outcome(folder.path, stored["summary"], built=False)
    folder.check_free(force=force)
    with folder.locked():
        if folder.begin(mark):
            _say(f"continuing the unfinished run in {folder.unfinished}")
        if not is_compiled("search"):
            _say("compiling kernels, once for this version: about 25 s in all")
        summary = _write_all(spec, folder, threads or os.cpu_count() or 1, watch)
        write_provenance(folder.unfinished / PROVENANCE, spec, inputs, watch, summary)
        with Progress("writing the report", 1):
            write_report(folder.unfinished)
        folder.finish()
    return Outcome(folder.path, summary, built=True)
