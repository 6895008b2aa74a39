"""`circuitgen predict` as a user meets it, against the tables of the run itself."""

from __future__ import annotations

import csv
import io
import json

import numpy as np
import pandas as pd
import pytest
from builders_run import RECORDINGS, build_small, write_spec

from circuitgen.appositions import Slice
from circuitgen.cli import main
from circuitgen.core.errors import RunFolderError
from circuitgen.prediction import RunTables, slice_histogram
from circuitgen.run import Protocol, ReopenedCircuit, build
from circuitgen.wiring import show

POINTS = ["low", "low_50", "median", "high_50", "high"]


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    return build_small(tmp_path_factory.mktemp("run"))


@pytest.fixture
def ask(run, capsys):
    def ask(*words, code=0):
        assert main(["predict", str(run), *map(str, words)]) == code
        shown = capsys.readouterr()
        return json.loads(shown.out) if "--json" in words else shown.out + shown.err

    return ask


def test_all_pathways_least_known_first(ask, run):
    rows = ask("--json")["pathways"]
    stored = pd.read_csv(run / "pathways.csv").set_index(["pre_type", "post_type"])
    assert len(rows) == len(stored) == 9
    widths = [row["p_connect"]["high"] - row["p_connect"]["low"] for row in rows]
    assert widths == sorted(widths, reverse=True)
    for row in rows:
        own = stored.loc[(row["pre_type"], row["post_type"])]
        assert row["p_connect"]["median"] == own.p_connect
        assert row["synapses_mean"]["high_50"] == own.synapses_mean_high_50
        assert row["recorded"] == own.recorded
    lines = ask().splitlines()
    assert max(map(len, lines)) <= 80
    assert any(line.startswith("* recorded") for line in lines)


def test_any_window_is_the_weighted_sum_of_the_bins_within(ask, run):
    """0-75 um by itself against three bins of the curve, and brute force."""
    rows = ask("--distance-um", 0, 75, "--json")["pathways"]
    curves = pd.read_csv(run / "curves.csv")
    cells = pd.read_parquet(run / "cells.parquet")
    place, types = cells[["x_um", "y_um", "z_um"]].to_numpy(), cells.cell_type.to_numpy()
    distance = np.linalg.norm(place[:, None] - place[None], axis=2)
    np.fill_diagonal(distance, np.inf)
    for row in rows:
        mine = np.ix_(types == row["pre_type"], types == row["post_type"])
        assert row["pairs"] == (distance[mine] <= 75).sum()
        own = curves[
            (curves.pre_type == row["pre_type"])
            & (curves.post_type == row["post_type"])
            & (curves.distance_high_um <= 75)
            & (curves.pairs_n > 0)
        ]
        ceiling = np.average(own.p_ceiling, weights=own.pairs_n)
        assert row["p_ceiling"] == pytest.approx(ceiling)
        values = [row["p_connect"][name] for name in POINTS]
        assert values == sorted(values)
        assert min(own.p_connect_low) <= values[2] <= max(own.p_connect_high)


def test_one_pathway_with_its_curve_and_recordings(ask, run):
    content = ask("--pre", "pyramid", "--post", "pyramid", "--json")
    assert [point["row"] for point in content["recordings"]] == [1]
    assert content["recordings"][0]["connected_n"] == 14
    assert len(content["curve"]) == 12
    text = ask("--pre", "pyramid", "--post", "pyramid")
    assert "row 1: 0-100 um, 14/120 p = 0.117, fit" in text
    assert max(map(len, text.splitlines())) <= 80
    assert "nobody recorded it" in ask("--pre", "pyramid", "--post", "stellate")


def test_lateral_windows_hold_more_pairs(ask):
    def pairs(*words):
        rows = ask("--distance-um", 0, 60, *words, "--json")["pathways"]
        return sum(row["pairs"] for row in rows)

    assert pairs("--lateral") > pairs()


def test_a_slice_shows_fewer_connections_the_thinner_it_is(run, ask):
    """The same pairs, their lost appositions counted or not."""
    tables, circuit = RunTables(run), ReopenedCircuit(run)
    shares = []
    for thickness, low, high in ((1000, 480, 520), (300, 130, 170), (120, 40, 80)):
        protocol = Protocol((0,), (0,), 0.0, 80.0, False, Slice(thickness, low, high))
        histogram = slice_histogram(circuit, protocol)
        seen = show(tables.laws, {0: histogram}).probability[0]
        whole = show(tables.laws, {0: histogram.sum(axis=1)}).probability[0]
        shares.append(seen / whole)
    assert shares[0] > 0.999  # the arbors span less than a millimetre
    assert shares[0] > shares[1] > shares[2] > 0.2
    words = ("--pre", "pyramid", "--post", "pyramid", "--distance-um", 0, 80)
    text = ask(*words, "--slice", 120, "--soma-depth", 40, 80, "--json")
    shown = text["pathway"]["p_connect"]["median"]
    assert shown == pytest.approx(seen, rel=0.15)  # the median of draws, not the mean


def _write_pairs(path, rows):
    text = io.StringIO()
    writer = csv.DictWriter(text, sorted({name for row in rows for name in row}))
    writer.writeheader()
    writer.writerows(rows)
    path.write_text(text.getvalue())
    return path


def _placed(side, cell):
    return {
        f"{side}_type": cell.cell_type,
        f"{side}_morphology": cell.morphology,
        f"{side}_x_um": cell.x_um,
        f"{side}_y_um": cell.y_um,
        f"{side}_z_um": cell.z_um,
        f"{side}_azimuth_deg": cell.azimuth_deg,
    }


def test_pairs_by_id_and_by_place_are_the_same_pairs(ask, run, tmp_path):
    """A cell asked for by its own place must have the appositions of the circuit."""
    pairs = pd.read_parquet(run / "pairs.parquet")
    cells = pd.read_parquet(run / "cells.parquet")
    chosen = pairs.sort_values("appositions_n").iloc[[0, len(pairs) // 2, -1]]
    rows = []
    for pair in chosen.itertuples():
        pre, post = (cells.iloc[i] for i in (pair.pre_cell_id, pair.post_cell_id))
        rows.append({"pre_cell_id": pre.cell_id, "post_cell_id": post.cell_id})
        rows.append(_placed("pre", pre) | _placed("post", post))
        rows.append({"pre_cell_id": pre.cell_id} | _placed("post", post))
    found = ask("--cells", _write_pairs(tmp_path / "pairs.csv", rows), "--json")["pairs"]
    for place, pair in enumerate(chosen.itertuples()):
        for row in found[3 * place : 3 * place + 3]:
            assert row["appositions_n"] == pair.appositions_n
            assert row["p_connect"]["low"] == pytest.approx(pair.p_connect_low, rel=1e-5)
            assert row["p_connect"]["high"] == pytest.approx(
                pair.p_connect_high, rel=1e-5
            )
            assert row["soma_distance_um"] == pytest.approx(
                pair.soma_distance_um, rel=1e-5
            )


def test_pairs_that_do_not_touch_never_connect(ask, run, tmp_path):
    pairs = pd.read_parquet(run / "pairs.parquet")
    touching = set(zip(pairs.pre_cell_id, pairs.post_cell_id, strict=True))
    apart = next(
        (i, j) for i in range(60) for j in range(60) if i != j and (i, j) not in touching
    )
    rows = [{"pre_cell_id": apart[0], "post_cell_id": apart[1]}]
    [row] = ask("--cells", _write_pairs(tmp_path / "p.csv", rows), "--json")["pairs"]
    assert row["appositions_n"] == 0
    assert row["p_connect"]["high"] == row["synapses_expected"]["high"] == 0.0


def test_everything_wrong_with_a_list_of_pairs_is_said_at_once(ask, tmp_path):
    path = tmp_path / "pairs.csv"
    path.write_text(
        "pre_cell_id,post_cell_id,post_type,post_morphology,post_x_um\n"
        "5,999,,,\n"
        "five,,pyramidd,L23_pyramidal_1,1\n"
        "7,,pyramid,L23_pyramidal_11,nan\n"
    )
    text = ask("--cells", path, code=2)
    for words in (
        f"{path}:2: post_cell_id = 999 must be a cell id, 0 to 119",
        f"{path}:3: pre_cell_id = 'five' must be a finite number",
        f"{path}:3: post_type = 'pyramidd' is no cell type of the run",
        "post_azimuth_deg is missing; without post_cell_id it is needed",
        f"{path}:4: post_morphology = 'L23_pyramidal_11' is no reconstruction",
        "and 1 more",
    ):
        assert words in text
    assert "pyramid" in text
    path.write_text("pre_cell,post_cell_id\n1,2\n")
    assert "did you mean 'pre_cell_id'" in ask("--cells", path, code=2)
    path.write_text("")
    assert "names no pair" in ask("--cells", path, code=2)
    assert "cannot be read" in ask("--cells", tmp_path / "none.csv", code=2)


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (["--pre", "pyramid"], "--post go together"),
        (["--pre", "piramid", "--post", "basket"], "did you mean 'pyramid'"),
        (["--slice", "300"], "needs one pathway"),
        (["--distance-um", "90", "10"], "must be 0 <= LOW < HIGH"),
        (["--lateral"], "needs --distance-um"),
        (["--leave-one-out", "--distance-um", "0", "9"], "belongs to pathways"),
        (
            ["--pre", "basket", "--post", "basket", "--slice", "50", "--soma-depth"]
            + ["40", "90"],
            "must lie within the slice",
        ),
    ],
)
def test_options_that_make_no_sense_are_refused(ask, words, expected):
    assert expected in ask(*words, code=2)


def test_tables_go_to_csv_files(ask, tmp_path):
    out = tmp_path / "table.csv"
    ask("--csv", out)
    frame = pd.read_csv(out)
    assert len(frame) == 9
    assert {"p_connect_low", "p_connect_median", "synapses_mean_high_50"} <= {*frame}
    text = ask("--csv", tmp_path, code=2)
    assert "cannot be written" in text


def test_leave_one_out_judges_the_runs_own_recordings(ask):
    report = ask("--leave-one-out", "--json")
    assert report["recordings_n"] == 5  # the row for the audit is not among them
    assert len(report["log_score_plain"]) == 3
    text = ask("--leave-one-out")
    assert report["sentence"] in " ".join(text.split())
    assert max(map(len, text.splitlines())) <= 80


def test_no_run_and_a_changed_spec_are_named(tmp_path, capsys):
    assert main(["predict", str(tmp_path / "none")]) == 2
    assert "does not exist" in capsys.readouterr().err
    (tmp_path / "empty").mkdir()
    assert main(["predict", str(tmp_path / "empty")]) == 2
    assert "is no run folder" in capsys.readouterr().err
    spec = write_spec(tmp_path / "spec")
    folder = build(spec, tmp_path / "run").folder
    (spec.parent / "recordings.csv").write_text(RECORDINGS.replace("120,14", "120,15"))
    with pytest.raises(RunFolderError, match="recordings.csv has changed since"):
        ReopenedCircuit(folder)
    RunTables(folder)
    spec.unlink()
    with pytest.raises(RunFolderError, match="which is gone"):
        ReopenedCircuit(folder)
