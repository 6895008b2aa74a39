"""The sums behind the report, against slow twins that take the tables pair by pair."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from builders_run import OPEN, WRAP, build_small
from scipy.stats import binom

from circuitgen.report.content import gather
from circuitgen.report.recordings import troubles, verdict
from circuitgen.report.source import RunTables
from circuitgen.report.totals import BIN_UM, pair_totals


@pytest.fixture(scope="module", params=[OPEN, WRAP], ids=["open", "wrap"])
def run(request, tmp_path_factory):
    return RunTables(build_small(tmp_path_factory.mktemp("run"), request.param))


@pytest.fixture(scope="module")
def content(run):
    return gather(run)


@pytest.fixture(scope="module")
def tables(run):
    """Cells and pairs with the names of their types."""
    cells = pd.read_parquet(run.path / "cells.parquet")
    types = cells.cell_type.astype(str)
    pairs = pd.read_parquet(run.path / "pairs.parquet")
    pairs["pre_type"] = types[pairs.pre_cell_id].to_numpy()
    pairs["post_type"] = types[pairs.post_cell_id].to_numpy()
    return cells, pairs


def test_curves_are_those_of_the_table(run, content):
    stored = pd.read_csv(run.path / "curves.csv").set_index(["pre_type", "post_type"])
    n = len(run.type_names)
    assert content["details"]
    for code, detail in content["details"].items():
        names = run.type_names[int(code) // n], run.type_names[int(code) % n]
        own, curve = stored.loc[[names]], detail["curve"]
        assert curve["first"] * BIN_UM == own.distance_low_um.iloc[0]
        assert curve["n"] == own.pairs_n.tolist()
        for name, column in (("p", ""), ("low", "_low"), ("high", "_high")):
            shown = np.array(curve[name], float)
            # Four digits are kept.
            np.testing.assert_allclose(shown, own[f"p_connect{column}"], rtol=1e-3)


def test_histograms_count_pairs_and_connections(run, tables, content):
    cells, pairs = tables
    edges = pd.read_csv(run.path / "edges.csv")
    n = len(run.type_names)
    assert sum(map(sum, content["by_depth"])) == pairs.appositions_n.sum()
    for code, detail in content["details"].items():
        pre, post = run.type_names[int(code) // n], run.type_names[int(code) % n]
        own = pairs[(pairs.pre_type == pre) & (pairs.post_type == post)]
        assert sum(detail["appositions"]) == len(own)
        drawn = edges[(edges.pre_type == pre) & (edges.post_type == post)]
        counts = drawn.synapses_n.clip(upper=content["most"]).value_counts()
        shown = {i: k for i, k in enumerate(detail["synapses"]) if k}
        assert shown == counts.to_dict()
        assert sum(detail["delays"]) == len(drawn)


def test_degrees_and_reciprocity(run, content):
    cells = pd.read_parquet(run.path / "cells.parquet")
    edges = pd.read_csv(run.path / "edges.csv")
    for row in content["degrees"]["types"]:
        assert row["cells_n"] == (cells.cell_type == row["cell_type"]).sum()
        out_n = (edges.pre_type == row["cell_type"]).sum()
        assert row["out_mean"] == pytest.approx(out_n / row["cells_n"])
        in_n = (edges.post_type == row["cell_type"]).sum()
        assert row["in_mean"] == pytest.approx(in_n / row["cells_n"])
    linked = set(zip(edges.pre_cell_id, edges.post_cell_id, strict=True))
    types = cells.cell_type.astype(str).tolist()
    for row in content["reciprocity"]:
        wanted = {row["a_type"], row["b_type"]}
        both = sum(
            (post, pre) in linked and {types[pre], types[post]} == wanted
            for pre, post in linked
        )
        assert row["both_n"] == both / 2


def test_lines_of_whole_cells_hold_their_synapses(content):
    """Thinned lines stay within 8 um of the cable, plus a micrometre of rounding."""
    pairs = content["shown_pairs"]
    assert len(pairs) >= 3  # under wrap a class may have no pair that is whole
    for pair in pairs:
        ends = {"pre": (2,), "post": (1, 2, 3, 4)}
        for side, kinds in ends.items():
            cell = pair[side]
            for synapse in pair["synapses"]:
                at = np.array(synapse["at"])
                nearest = np.linalg.norm(at - cell["soma"]) - cell["soma_radius_um"]
                for kind, flat in cell["lines"]:
                    if kind in kinds:
                        nearest = min(nearest, _from_line(at, flat))
                # The axon may pass a gap and two radii away.
                assert nearest < 8 + 1 + 3


def _from_line(point, flat) -> float:
    line = np.array(flat, float).reshape(-1, 3)
    start, way = line[:-1], np.diff(line, axis=0)
    length = np.maximum((way**2).sum(axis=1), 1e-12)
    along = np.clip(((point - start) * way).sum(axis=1) / length, 0, 1)
    return np.linalg.norm(start + along[:, None] * way - point, axis=1).min()


def _two_sided(k, n, p):
    """Sum the chances of all outcomes no likelier than the one seen."""
    chances = binom.pmf(np.arange(n + 1), n, p)
    return chances[chances <= chances[k] * (1 + 1e-7)].sum()


@pytest.mark.parametrize("p", [0.05, 0.3, 0.8])
def test_verdicts_follow_the_two_sided_binomial_test(p):
    n = 40
    for k in range(n + 1):
        surprising = _two_sided(k, n, p) < 0.05
        word = "agrees"
        if surprising:
            word = "too high" if p > k / n else "too low"
        assert verdict(k, n, p) == word


def test_verdict_cannot_tell():
    assert verdict(None, None, 0.2) == "cannot tell"
    assert verdict(1, 10, None) == "cannot tell"
    assert verdict(0, 2, 0.4) == "cannot tell"  # 0.36 and 0.16 either way


def test_troubles_in_plain_words(run):
    row = run.recordings[0] | {"verdict": "agrees", "feasible": True}
    assert troubles([row]) == []
    [words] = troubles([row | {"feasible": False, "note": "at most 0.3 can be met"}])
    assert "cannot be met. at most 0.3" in words
    [words] = troubles([row | {"verdict": "too high", "p_realised": 0.5}])
    assert "0.5 is too high for 14 connected of 120" in words


def test_sums_do_not_depend_on_the_parts(run, monkeypatch):
    whole = pair_totals(run)
    rows = RunTables.batches

    def cut(self, table, names):
        for batch in rows(self, table, names):
            for place in range(0, len(batch[names[0]]), 777):
                yield {name: batch[name][place : place + 777] for name in names}

    monkeypatch.setattr(RunTables, "batches", cut)
    parts = pair_totals(run)
    assert (whole.appositions == parts.appositions).all()
    assert (whole.by_depth == parts.by_depth).all()
