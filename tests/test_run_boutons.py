"""Known bouton densities: met by the laws and shown by the drawn circuit."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
from builders_run import write_spec

from circuitgen.core.errors import InputError
from circuitgen.morphology.arbor import Kind
from circuitgen.run import ReopenedCircuit, build
from circuitgen.spec import load_spec

DENSITY, ERROR = 0.012, 0.0004


def _spec(folder, line):
    spec = write_spec(folder)
    text = spec.read_text()
    mark = "    targets: [basal, apical, axon_initial_segment]\n"
    assert mark in text
    spec.write_text(text.replace(mark, f"{mark}    {line}\n"))
    return spec


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    folder = tmp_path_factory.mktemp("boutons")
    line = f"bouton_density_per_um: {{mean: {DENSITY}, sd: {ERROR}}}"
    return build(_spec(folder, line), folder / "run").folder


def test_the_drawn_circuit_has_the_density(run):
    summary = json.loads((run / "provenance.json").read_text())["summary"]
    [total] = summary["bouton_totals"]
    assert total["type"] == "pyramid"
    cells = pd.read_parquet(run / "cells.parquet").cell_type.astype(str).to_numpy()
    edges = pd.read_parquet(run / "edges.parquet")
    made = edges.synapses_n[cells[edges.pre_cell_id] == "pyramid"]
    # Known to 3 %; the draw adds the error of so many connections.
    error = np.hypot(ERROR / DENSITY, 1 / np.sqrt(len(made)))
    assert made.sum() / total["axon_um"] == pytest.approx(DENSITY, rel=3 * error)


def test_the_length_of_axon_inside_is_that_of_the_placed_arbors(run):
    """Segment middles within the cylinder of 140 um, arbor by arbor, in plain numpy."""
    circuit = ReopenedCircuit(run)
    summary = json.loads((run / "provenance.json").read_text())["summary"]
    cells, expected, everything = circuit.cells, 0.0, 0.0
    for cell in np.flatnonzero(cells.type_index == 0):
        arbor = circuit.arbors[cells.arbor_index[cell]]
        axon = arbor.kind == Kind.AXON
        middle = ((arbor.start_um + arbor.end_um) / 2)[axon]
        angle = np.deg2rad(cells.azimuth_deg[cell])
        turn = np.array(
            [[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]]
        )
        lateral = middle[:, :2] @ turn.T + cells.position_um[cell, :2]
        z = middle[:, 2] + cells.position_um[cell, 2]
        inside = (np.hypot(*lateral.T) <= 70) & (z >= 0) & (z <= 570)
        expected += arbor.length_um[axon][inside].sum()
        everything += arbor.length_um[axon].sum()
    [total] = summary["bouton_totals"]
    assert total["axon_um"] == pytest.approx(expected, rel=1e-9)
    assert total["axon_um"] < 0.9 * everything


def test_a_density_narrows_what_nobody_recorded(run, tmp_path):
    plain = build(write_spec(tmp_path), tmp_path / "run").folder

    def width(folder):
        frame = pd.read_csv(folder / "pathways.csv")
        own = frame[(frame.pre_type == "pyramid") & (frame.post_type == "stellate")]
        return float((own.p_connect_high - own.p_connect_low).iloc[0])

    assert width(run) < 0.9 * width(plain)


@pytest.mark.parametrize(
    ("line", "words"),
    [
        ("bouton_density_per_um: 0.1", "bouton_density_per_um"),
        ("bouton_density_per_um: {mean: 0.1}", "sd is missing"),
        ("bouton_density_per_um: {mean: -1, sd: 0.1}", "must be > 0"),
        ("bouton_density_per_um: {mean: 0.1, std: 0.1}", "did you mean 'sd'"),
    ],
)
def test_densities_amiss_are_named(tmp_path, line, words):
    with pytest.raises(InputError) as caught:
        load_spec(_spec(tmp_path, line))
    assert words in str(caught.value)
