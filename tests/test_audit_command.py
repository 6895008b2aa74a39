"""`circuitgen audit` as a user meets it: our runs, anyone's tables, wrong input."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
from builders_run import RECORDINGS, build_small, write_spec

from circuitgen.audit import SliceView
from circuitgen.cli import main
from circuitgen.run import ReopenedCircuit, build, protocol_of

HEADER = "pre_type,post_type,tested_n,connected_n\n"


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    return build_small(tmp_path_factory.mktemp("run"))


@pytest.fixture
def ask(capsys):
    def ask(*words, code=0):
        assert main(["audit", *map(str, words)]) == code
        shown = capsys.readouterr()
        return json.loads(shown.out) if "--json" in words else shown.out + shown.err

    return ask


def _foreign(folder, places=True):
    """Write 60 cells and their connections under names of somebody else's."""
    random = np.random.default_rng(4)
    cells = pd.DataFrame(
        {
            "neuron": [f"n{i:02d}" for i in range(60)],
            "class": np.where(np.arange(60) < 40, "grain", "dune"),
            "x_um": random.uniform(0, 200, 60),
            "y_um": random.uniform(0, 200, 60),
            "z_um": random.uniform(0, 200, 60),
        }
    )
    if not places:
        cells = cells[["neuron", "class"]]
    pre, post = np.nonzero(random.random((60, 60)) < 0.2)
    edges = pd.DataFrame(
        {"src": cells.neuron[pre].values, "dst": cells.neuron[post].values}
    )
    cells.to_csv(folder / "cells.csv", index=False)
    edges.to_csv(folder / "edges.csv", index=False)
    edges.to_parquet(folder / "edges.parquet")
    mapping = "cell_id=neuron,cell_type=class,pre_cell_id=src,post_cell_id=dst"
    return ["--cells", folder / "cells.csv", "--columns", mapping], edges


def test_a_run_is_audited_against_its_own_recordings(ask, run):
    found = ask(run, "--json")
    rows = {row["row"]: row for row in found["rows"] if "prob" in row["measure"]}
    fit = pd.read_csv(run / "fit.csv").set_index("row")
    for number, row in rows.items():
        assert row["circuit"] == pytest.approx(fit.p_realised[number])
        assert row["use"] == fit.use[number]
    assert found["overall"]["measures"] == 1  # the row kept out of the fit
    text = ask(run)
    assert max(map(len, text.splitlines())) <= 80
    assert text.index("not fitted to") < text.index("entered the fit")


def test_disagreement_is_exit_code_1(ask, run, tmp_path):
    path = tmp_path / "other.csv"
    path.write_text(HEADER + "basket,stellate,300,3\npyramid,pyramid,300,33\n")
    text = ask(run, "--recordings", path, code=1)
    assert "too high" in text
    assert "entered the fit" not in text
    assert "1 disagree" in text


def test_tables_from_elsewhere_csv_or_parquet(ask, tmp_path):
    words, edges = _foreign(tmp_path)
    path = tmp_path / "recordings.csv"
    path.write_text(HEADER + "grain,dune,100,20\ndune,dune,80,16\n")
    words += ["--recordings", path, "--json", "--graph"]
    first = ask(*words, "--edges", tmp_path / "edges.csv")
    assert ask(*words, "--edges", tmp_path / "edges.parquet") == first
    others = edges[edges.src != edges.dst]
    is_grain = others.src.str[1:].astype(int) < 40
    to_dune = others.dst.str[1:].astype(int) >= 40
    assert first["rows"][0]["circuit"] == pytest.approx((is_grain & to_dune).sum() / 800)
    assert first["graph"]["connections"] == len(others)
    path.write_text(
        "pre_type,post_type,tested_n,connected_n,distance_high_um\ngrain,dune,90,18,80\n"
    )
    assert ask(*words, "--edges", tmp_path / "edges.csv")["overall"]["measures"] == 1
    words, _ = _foreign(tmp_path, places=False)
    words += ["--recordings", path, "--edges", tmp_path / "edges.csv"]
    assert "needs the places of the somata" in ask(*words, code=2)


def test_rows_of_one_pair_are_its_synapses(ask, tmp_path):
    words, edges = _foreign(tmp_path)
    twice = pd.concat([edges, edges.iloc[::2]])
    twice.to_csv(tmp_path / "synapses.csv", index=False)
    path = tmp_path / "recordings.csv"
    path.write_text(
        "pre_type,post_type,synapses_mean,synapses_sd,synapses_pairs_n\n"
        "grain,grain,1.5,0.5,30\n"
    )
    words += ["--recordings", path, "--edges", tmp_path / "synapses.csv", "--json"]
    [row] = ask(*words)["rows"]
    assert row["circuit"] == pytest.approx(1.5, abs=0.15)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (
            {"recordings": "pre_type,post_type,tested_n\ngrain,dune,9\n"},
            "connected_n is",
        ),
        ({"recordings": HEADER + "grian,dune,100,20\n"}, "did you mean 'grain'"),
        ({"recordings": HEADER + "grain,dune,10,20\n"}, "must be <= tested_n"),
        (
            {"recordings": HEADER.strip() + ",distance_low_um\ngrain,dune,9,2,-5\n"},
            "distance_low_um = -5",
        ),
        ({"columns": "cell_id=neuron,cell_type=class,pre_cell_id=sorce"}, "'src'"),
        ({"columns": "cellid=neuron"}, "did you mean 'cell_id'"),
        ({"edge": "n01,n99"}, "edges.csv:8: dst = 'n99' is in no row of the cells"),
        ({"edge": "n01"}, "edges.csv:8: is broken: Expected 2 columns, got 1"),
        ({"edges": None}, "cannot be read"),
        ({"recordings": ""}, "is empty"),
    ],
)
def test_bad_input_is_one_message_each(ask, tmp_path, change, words):
    given, edges = _foreign(tmp_path)
    if "columns" in change:
        given[3] = change["columns"]
    path = tmp_path / "recordings.csv"
    path.write_text(change.get("recordings", HEADER + "grain,dune,100,20\n"))
    file = tmp_path / "edges.csv"
    if "edge" in change:
        lines = file.read_text().splitlines()
        lines[7] = change["edge"]
        file.write_text("\n".join(lines) + "\n")
    if "edges" in change:
        file = tmp_path / "none.csv"
    text = ask(*given, "--edges", file, "--recordings", path, code=2)
    assert words in text
    assert "Traceback" not in text


def test_which_circuit_must_be_said(ask, run, tmp_path):
    assert "give --cells and --edges" in ask(code=2)
    text = ask(run, "--cells", "a.csv", "--columns", "x=y", code=2)
    assert "keep one circuit" in text
    assert "--columns" in text
    assert "is no run folder" in ask(tmp_path, code=2)


def test_slices_count_synapses_on_uncut_paths(tmp_path):
    """The build counted the same from its sites, before it wrote the tables."""
    head, *rows = RECORDINGS.splitlines()
    head += ",slice_thickness_um,soma_depth_low_um,soma_depth_high_um"
    rows = [f"{rows[0]},120,40,80", f"{rows[1]},200,30,90", f"{rows[3]},,,"]
    text = "\n".join([head, *rows]) + "\n"
    folder = build(write_spec(tmp_path, recordings=text), tmp_path / "run").folder
    fit = pd.read_csv(folder / "fit.csv")
    view, circuit = SliceView(folder), ReopenedCircuit(folder)
    for place in (0, 1):
        protocol = protocol_of(circuit, circuit.spec.recordings[place])
        connected, pairs = view.counts(protocol)
        assert pairs == pytest.approx(fit.pairs_in_window[place])
        # Places on the cable were rounded to single precision in the tables.
        assert connected / pairs == pytest.approx(fit.p_realised[place], rel=1e-3)
