"""What stands in a run folder is true, checked against the inputs themselves."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from builders_run import OPEN, ROOT, WRAP, build_small

from circuitgen.core.files import sha256_of
from circuitgen.core.run_tables import ALL_TABLES, CURVES, EDGES_TEXT, FIT, PATHWAYS
from circuitgen.wiring import Law, wilson_interval
from circuitgen.wiring.law import size_distribution


@pytest.fixture(scope="module", params=[OPEN, WRAP], ids=["open", "wrap"])
def run(request, tmp_path_factory):
    folder = build_small(tmp_path_factory.mktemp("run"), request.param)
    tables = {
        name: pd.read_parquet(folder / f"{name}.parquet")
        for name in ("cells", "pairs", "edges", "synapses")
    }
    tables |= {
        name: pd.read_csv(folder / f"{name}.csv")
        for name in ("pathways", "curves", "fit")
    }
    tables["folder"] = folder
    tables["period"] = (
        np.array([160.0, 130.0, np.inf]) if request.param == WRAP else None
    )
    return tables


def apart(run, pre, post):
    """Soma offsets, the shortest way round a periodic box."""
    place = run["cells"][["x_um", "y_um", "z_um"]].to_numpy()
    away = place[post] - place[pre]
    if run["period"] is not None:
        period = run["period"][:2]
        away[:, :2] -= period * np.round(away[:, :2] / period)
    return away


def test_tables_equal_their_declarations(run):
    for table in ALL_TABLES:
        if table in (PATHWAYS, CURVES, FIT, EDGES_TEXT):
            continue
        path = run["folder"] / f"{table.name}.parquet"
        parts = sorted(path.iterdir()) if path.is_dir() else [path]
        stored = pa.concat_tables([pq.read_table(part) for part in parts])
        assert stored.schema.equals(table.schema)
        frame = stored.select(list(table.sort_key)).to_pandas()
        expected = frame.sort_values(list(table.sort_key), ignore_index=True)
        pd.testing.assert_frame_equal(frame, expected)
        for column in table.columns:
            assert column.nullable or stored[column.name].null_count == 0
    for table, name in ((PATHWAYS, "pathways"), (CURVES, "curves"), (FIT, "fit")):
        frame = run[name]
        assert list(frame.columns) == [column.name for column in table.columns]
        assert len(frame) > 0


def test_edges_are_the_drawn_pairs_with_their_synapses(run):
    keys = ["pre_cell_id", "post_cell_id"]
    pairs = run["pairs"].set_index(keys)
    edges = run["edges"].set_index(keys)
    assert edges.index.is_unique
    assert pairs.index.is_unique
    assert edges.index.isin(pairs.index).all()
    assert (pairs.appositions_n >= 1).all()
    touching = pairs.loc[edges.index]
    assert (edges.appositions_n == touching.appositions_n).all()
    assert (edges.synapses_n >= 1).all()
    assert (edges.synapses_n <= edges.appositions_n).all()
    counted = run["synapses"].groupby(keys)
    assert (counted.size().reindex(edges.index) == edges.synapses_n).all()
    mean_delay = counted.delay_ms.mean().reindex(edges.index)
    np.testing.assert_allclose(edges.delay_ms, mean_delay, rtol=1e-5)
    text = pd.read_csv(run["folder"] / "edges.csv")
    types = run["cells"].cell_type.astype(str).to_numpy()
    assert (text.pre_type == types[text.pre_cell_id]).all()
    assert (text.post_type == types[text.post_cell_id]).all()
    assert (text.synapses_n == run["edges"].synapses_n).all()


def test_number_drawn_is_what_the_probabilities_expect(run):
    # The sum of independent draws; 4 standard deviations: false alarm 1 in 16,000.
    p = run["pairs"].p_connect.to_numpy(float)
    sd = np.sqrt((p * (1 - p)).sum())
    assert abs(len(run["edges"]) - p.sum()) < 4 * sd
    expected = run["pairs"].synapses_expected.sum()
    # A pair's synapses vary by no more than its appositions.
    bound = 4 * np.sqrt((p * run["pairs"].appositions_n.to_numpy() ** 2).sum())
    assert abs(len(run["synapses"]) - expected) < bound


def test_soma_distance(run):
    pairs = run["pairs"]
    away = apart(run, pairs.pre_cell_id.to_numpy(), pairs.post_cell_id.to_numpy())
    np.testing.assert_allclose(
        pairs.soma_distance_um, np.linalg.norm(away, axis=1), rtol=1e-5
    )


def _samples(name):
    """Rows of an SWC file by number: type, x, y, z, radius, parent."""
    rows = np.loadtxt(ROOT / "morphologies" / f"{name}.swc")
    return {int(row[0]): row[1:] for row in rows}


def _path(samples, number, fraction):
    """Walk from a place to the surface of the soma; stand-ins have a one-point soma."""
    total, share = 0.0, fraction
    while True:
        row = samples[number]
        above = samples[int(row[5])]
        length = np.linalg.norm(row[1:4] - above[1:4])
        if above[0] == 1:
            return total + share * length - above[4]
        total, share, number = total + share * length, 1.0, int(row[5])


def test_synapses_lie_where_their_swc_samples_say(run):
    rng = np.random.default_rng(1)
    synapses, cells = run["synapses"], run["cells"]
    for row in synapses.iloc[rng.choice(len(synapses), 200, replace=False)].itertuples():
        post = cells.iloc[row.post_cell_id]
        samples = _samples(post.morphology)
        sample = samples[row.post_segment]
        place = sample[1:4]
        if row.target != "soma":
            above = samples[int(sample[5])][1:4]
            place = above + row.post_fraction * (place - above)
            path = _path(samples, row.post_segment, row.post_fraction)
            # Paths are exact at corners and within the course's tolerance between.
            assert row.dendrite_path_um == pytest.approx(path, abs=0.5)
        kinds = {"soma": 1, "axon_initial_segment": 2, "basal": 3, "apical": 4}
        assert sample[0] == kinds[row.target]
        x, y, z = place[0], -place[2], place[1]  # y of the file is up
        angle = np.deg2rad(post.azimuth_deg)
        turned = [
            np.cos(angle) * x - np.sin(angle) * y + post.x_um,
            np.sin(angle) * x + np.cos(angle) * y + post.y_um,
            z + post.z_um,
        ]
        np.testing.assert_allclose([row.x_um, row.y_um, row.z_um], turned, atol=0.15)
        axon = _samples(cells.iloc[row.pre_cell_id].morphology)
        assert axon[row.pre_segment][0] == 2
        path = _path(axon, row.pre_segment, row.pre_fraction)
        assert row.axon_path_um == pytest.approx(path, abs=0.5)
        assert row.delay_ms == pytest.approx(row.axon_path_um / 250 + 0.75, abs=1e-4)
        assert 0 <= row.gap_um <= 1.0


def test_only_wanted_targets(run):
    types = run["cells"].cell_type.astype(str).to_numpy()
    made = run["synapses"].assign(pre=types[run["synapses"].pre_cell_id])
    found = made.groupby("pre").target.unique().apply(set).to_dict()
    assert "soma" not in found["pyramid"]
    assert "axon_initial_segment" not in found["basket"]
    assert "soma" in found["basket"]


def test_pathways_count_pairs(run):
    types = run["cells"].cell_type.astype(str)
    sizes = types.value_counts()
    pairs = run["pairs"]
    touching = pd.crosstab(
        types.to_numpy()[pairs.pre_cell_id], types.to_numpy()[pairs.post_cell_id]
    )
    for row in run["pathways"].itertuples():
        same = sizes[row.pre_type] if row.pre_type == row.post_type else 0
        assert row.pairs_n == sizes[row.pre_type] * sizes[row.post_type] - same
        assert row.touching_pairs_n == touching.loc[row.pre_type, row.post_type]
        points = [row.p_connect_low, row.p_connect_low_50, row.p_connect]
        points += [row.p_connect_high_50, row.p_connect_high, row.p_ceiling + 1e-12]
        assert points == sorted(points)
        assert row.p_drawn <= row.p_ceiling + 1e-12
        assert 1 <= row.synapses_mean_low <= row.synapses_mean <= row.synapses_mean_high


def _in_window(run, row):
    """All ordered pairs of different cells that a row could have sampled."""
    groups = {"excitatory": ["pyramid", "stellate"]}
    types = run["cells"].cell_type.astype(str)
    members = [
        np.flatnonzero(types.isin(groups.get(name, [name])))
        for name in (row.pre_type, row.post_type)
    ]
    pre, post = (side.ravel() for side in np.meshgrid(*members, indexing="ij"))
    pre, post = pre[pre != post], post[pre != post]
    away = apart(run, pre, post)
    distance = np.linalg.norm(
        away[:, :2] if row.distance_kind == "lateral" else away, axis=1
    )
    high = np.inf if np.isnan(row.distance_high_um) else row.distance_high_um
    inside = (distance >= row.distance_low_um) & (distance <= high)
    return pre[inside], post[inside]


def test_recordings_are_met_over_the_pairs_they_sample(run):
    joined = set(zip(run["edges"].pre_cell_id, run["edges"].post_cell_id, strict=True))
    chances = run["pairs"].set_index(["pre_cell_id", "post_cell_id"]).p_connect
    for row in run["fit"].itertuples():
        pairs = list(zip(*_in_window(run, row), strict=True))
        assert row.pairs_in_window == len(pairs)
        p = chances.reindex(pairs).fillna(0.0).to_numpy(float)
        assert row.p_fitted == pytest.approx(p.mean(), abs=1e-5)
        realised = np.mean([pair in joined for pair in pairs])
        assert row.p_realised == pytest.approx(realised, abs=1e-9)
        # 4 standard deviations of independent draws: false alarm 1 in 16,000 a row.
        sd = np.sqrt((p * (1 - p)).sum()) / len(pairs)
        assert abs(row.p_realised - row.p_fitted) < 4 * sd + 1e-9
        low, high = wilson_interval(row.connected_n, row.tested_n)
        if row.use == "audit":
            assert "kept out" in row.note
        elif row.feasible:
            assert low <= row.p_fitted <= high
        else:
            assert "out of reach" in row.note


def test_provenance_hashes_the_tables(run):
    stored = json.loads((run["folder"] / "provenance.json").read_text())
    assert set(stored["tables_sha256"]) == {
        "cells.parquet", "pairs.parquet", "edges.parquet", "edges.csv",
        "synapses.parquet", "pathways.csv", "curves.csv", "fit.csv", "laws.parquet",
        "windows.parquet",
    }  # fmt: skip
    for name, value in stored["tables_sha256"].items():
        assert sha256_of(run["folder"] / name) == value
    assert stored["summary"]["connections"] == len(run["edges"])
    assert stored["summary"]["synapses"] == len(run["synapses"])
    assert stored["summary"]["appositions"] == run["pairs"].appositions_n.sum()


def test_curves_hold_the_pairs_of_their_bins(run):
    """Counts by brute force; medians within the touching share; laws stored by draw."""
    types = run["cells"].cell_type.astype(str).to_numpy()
    pre, post = (side.ravel() for side in np.indices((len(types), len(types))))
    pre, post = pre[pre != post], post[pre != post]
    distance = np.linalg.norm(apart(run, pre, post), axis=1)
    for row in run["curves"].itertuples():
        mine = (types[pre] == row.pre_type) & (types[post] == row.post_type)
        low = row.distance_low_um if row.distance_low_um > 0 else -1.0
        inside = mine & (distance > low) & (distance <= row.distance_high_um)
        assert row.pairs_n == inside.sum()
        if row.pairs_n:
            assert row.p_connect_low <= row.p_connect <= row.p_connect_high
            assert row.p_connect_high <= row.p_ceiling + 1e-12


def test_windows_and_laws_give_the_fitted_values_again(run):
    """What predictions read from the folder is what the build used."""
    windows = pd.read_parquet(run["folder"] / "windows.parquet")
    laws = pd.read_parquet(run["folder"] / "laws.parquet")
    assert laws.draw.nunique() == 401
    drawn = laws[laws.draw == 0].set_index(["pre_type", "post_type"])
    for row in run["fit"].itertuples():
        own = windows[windows.recording_row == row.row]
        assert own.pairs.sum() == pytest.approx(row.pairs_in_window)
        law = drawn.loc[pd.MultiIndex.from_frame(own[["pre_type", "post_type"]])]
        t0, t1, t2 = (law[name].to_numpy() for name in ("t0", "t1", "t2"))
        p = [
            1 - size_distribution(int(a), Law(*exponents))[0]
            for a, exponents in zip(
                own.appositions_n, zip(t0, t1, t2, strict=True), strict=True
            )
        ]
        expected = np.average(p, weights=own.pairs)
        assert row.p_fitted == pytest.approx(expected, rel=1e-9)
