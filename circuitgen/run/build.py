"""The order of the stages of a build."""

from __future__ import annotations

import json
import os
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
from threadpoolctl import threadpool_limits

from circuitgen.core.compilation import is_compiled
from circuitgen.core.progress import Progress, wrapped
from circuitgen.core.run_tables import CURVES, FIT, LAWS, PATHWAYS, WINDOWS
from circuitgen.report import write_report
from circuitgen.run.boutons import bouton_totals
from circuitgen.run.circuit import Circuit, assemble, write_cells
from circuitgen.run.folder import PROVENANCE, RunFolder
from circuitgen.run.protocol import within
from circuitgen.run.provenance import (
    Stopwatch,
    fingerprint,
    hash_inputs,
    write_provenance,
)
from circuitgen.run.results import (
    curves_table,
    fit_table,
    laws_table,
    pathways_table,
    recordings_met,
    windows_table,
)
from circuitgen.run.sites import SiteStore
from circuitgen.run.windows import Histograms, SliceLoss, take_histograms
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


def _home_layers(circuit: Circuit) -> list[int]:
    """Return the layer that holds most cells of each type."""
    cells, layers_n = circuit.cells, len(circuit.spec.layers)
    return [
        int(
            np.bincount(
                cells.layer_index[cells.type_index == place], minlength=layers_n
            ).argmax()
        )
        for place in range(len(circuit.spec.cell_types))
    ]


def _fit(circuit: Circuit, histograms: Histograms, draw: int | None) -> WiringFit:
    spec = circuit.spec
    # Sums of linear algebra depend on how many cores share them.
    with threadpool_limits(1, "blas"):
        return fit_pathways(
            [t.is_excitatory for t in spec.cell_types],
            _home_layers(circuit),
            histograms.windows,
            bouton_totals(circuit, histograms.everything),
            seed=spec.seed,
            draw=draw,
        )


def _make_wiring(circuit: Circuit, fit: WiringFit, histograms, folder: RunFolder):
    most = max(histogram.size for histogram in histograms.everything.values())
    return Wiring(
        circuit,
        tabulate(fit.laws, fit.draws, most),
        fit.reciprocity,
        histograms.dyads,
        [within(circuit, np.inf), *histograms.protocols],
        SliceLoss(circuit),
        folder.unfinished,
        folder.work,
    )


def _realised_both_ways(wiring: Wiring, histograms: Histograms) -> list[float]:
    """Return every row's share of reciprocal pairs in the drawn circuit, or NaN."""
    if not any(window.dyads_n for window in histograms.windows):
        return [float("nan")] * len(histograms.windows)
    edges = pq.read_table(
        wiring.folder / "edges.parquet", columns=["pre_cell_id", "post_cell_id"]
    )
    ends = [edges[name].to_numpy() for name in edges.column_names]
    return [
        wiring.dyads.realised(protocol, window.dyads_n, *ends)
        for window, protocol in zip(
            histograms.windows, histograms.protocols, strict=True
        )
    ]


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
        "synapses": int(realised.synapses),
        "recordings_met": met,
        "recordings_with_counts": counted,
        "recordings_infeasible": sum(not ok for ok in fit_columns.get("feasible", [])),
        "repairs": list(circuit.repairs),
        "wrap_um": list(circuit.wrap_um),
    }


def _write_all(
    spec: Spec, folder: RunFolder, threads: int, watch: Stopwatch, draw: int | None
) -> dict:
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
    with watch.stage("fit"):
        with Progress("pairs under every protocol", len(store.bounds)) as progress:
            histograms = take_histograms(circuit, store, progress)
        with Progress("fitting recordings", 1) as progress:
            fit = _fit(circuit, histograms, draw)
            progress.advance()
    for warning in fit.warnings:
        _say(f"warning: {warning}")
    wiring = _make_wiring(circuit, fit, histograms, folder)
    with watch.stage("wiring"):
        everything, *rows = wire_all(wiring, store, threads)
        edges_n = join_edges(wiring, len(store.bounds))
    with watch.stage("tables"):
        both_ways = _realised_both_ways(wiring, histograms)
        columns = fit_table(fit, rows, both_ways)
        here = folder.unfinished
        FIT.write_csv(here / "fit.csv", columns)
        PATHWAYS.write_csv(
            here / "pathways.csv", pathways_table(circuit, fit, histograms)
        )
        CURVES.write_csv(
            here / "curves.csv", curves_table(circuit, fit, histograms.bins)
        )
        laws = laws_table(circuit, fit.laws, fit.draws)
        LAWS.write_parquet(here / "laws.parquet", laws)
        WINDOWS.write_parquet(
            here / "windows.parquet", windows_table(circuit, histograms)
        )
    summary = _summarise(circuit, histograms, everything, edges_n, columns)
    summary["bouton_totals"] = [
        {
            "type": circuit.spec.type_names[total.pre_type],
            "mean_per_um": total.mean_per_um,
            "sd_per_um": total.sd_per_um,
            "axon_um": total.axon_um,
        }
        for total in bouton_totals(circuit, histograms.everything)
    ]
    return summary | {"warnings": [*circuit.warnings, *fit.warnings], "draw": draw}


def build(
    spec_path: Path,
    out: Path,
    *,
    force: bool = False,
    threads: int | None = None,
    draw: int | None = None,
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
    draw : int, optional
        Draw the circuit with this posterior draw of the laws, from 1, rather than with
        their mean: an ensemble of draws carries the uncertainty.

    Raises
    ------
    InputError, RunFolderError
        With one message that says what to mend.
    """
    spec, folder, watch = load_spec(spec_path), RunFolder(out), Stopwatch()
    inputs = hash_inputs(spec)
    mark = fingerprint(spec, inputs, draw)
    if not force and folder.finished_fingerprint() == mark:
        stored = json.loads((folder.path / PROVENANCE).read_text(encoding="utf-8"))
        return Outcome(folder.path, stored["summary"], built=False)
    folder.check_free(force=force)
    with folder.locked():
        if folder.begin(mark):
            _say(f"continuing the unfinished run in {folder.unfinished}")
        if not is_compiled("search"):
            _say("compiling kernels, once for this version: about 25 s in all")
        threads = threads or os.cpu_count() or 1
        summary = _write_all(spec, folder, threads, watch, draw)
        write_provenance(
            folder.unfinished / PROVENANCE, spec, inputs, watch, summary, mark
        )
        with Progress("writing the report", 1):
            write_report(folder.unfinished)
        folder.finish()
    return Outcome(folder.path, summary, built=True)
