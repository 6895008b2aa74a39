"""Recording in slices and both ways on a built circuit, against doing it for real."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from builders_run import RECORDINGS, write_spec
from oracles_slices import cut_arbor

from circuitgen.appositions import (
    Slice,
    find_appositions,
    index_targets,
    kept_sites,
    make_paths,
    make_scene,
    place_slices,
)
from circuitgen.run import ReopenedCircuit, build
from circuitgen.run.dyads import Dyads
from circuitgen.wiring import Law, Laws, show
from circuitgen.wiring.law import size_distribution

HEAD, *ROWS = RECORDINGS.splitlines()
MORE = "slice_thickness_um,soma_depth_low_um,soma_depth_high_um,"
MORE += "reciprocal_tested_n,reciprocal_connected_n"
SLICED = "\n".join(
    [
        f"{HEAD},{MORE}",
        "a,pyramid,pyramid,800,96,0,100,soma,2.6,1.0,90,fit,150,40,70,4000,64",
        "b,basket,pyramid,40,18,0,120,lateral,4.0,1.6,8,fit,,,,,",
        "c,excitatory,basket,40,14,20,150,soma,2.0,0.8,6,fit,300,,,,",
        "d,stellate,stellate,50,7,0,100,soma,2.4,0.9,7,fit,,,,,",
    ]
)


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    folder = tmp_path_factory.mktemp("sliced")
    return build(write_spec(folder, recordings=SLICED + "\n"), folder / "run").folder


@pytest.fixture(scope="module")
def fit(run):
    return pd.read_csv(run / "fit.csv").set_index("source")


def test_rows_in_slices_are_met_in_slices(run, fit):
    """The realised share is that of synapses on uncut paths; see the row's own pairs."""
    row = fit.loc["a"]
    error = np.sqrt(row.p_fitted * (1 - row.p_fitted) / 800)
    assert abs(row.p_measured - row.p_fitted) < 3 * error
    # Some 130 pairs' worth of placements stand behind the realised value.
    spread = np.sqrt(row.p_fitted * (1 - row.p_fitted) / row.pairs_in_window)
    assert abs(row.p_realised - row.p_fitted) < 4 * spread
    windows = pd.read_parquet(run / "windows.parquet")
    own = windows[windows.recording_row == 1]
    assert (own.lost_n > 0).any()
    assert (own.lost_n <= own.appositions_n).all()
    assert own.pairs.sum() == pytest.approx(row.pairs_in_window)
    # Most synapses lie near the somata: the slice hides a few connections, not none.
    laws = pd.read_parquet(run / "laws.parquet")
    law = laws[(laws.draw == 0) & (laws.pre_type == "pyramid")]
    law = law[law.post_type == "pyramid"].iloc[0]
    whole = own.groupby("appositions_n").pairs.sum()
    exponents = Law(law.t0, law.t1, law.t2)
    p = [1 - size_distribution(a, exponents)[0] for a in whole.index]
    assert np.average(p, weights=whole) > 1.01 * row.p_fitted


def test_reciprocals_are_met_together_with_the_margins(run, fit):
    """4,000 pairs, 64 both ways; independence would give about half as many."""
    row = fit.loc["a"]
    counted = 64 / 4000
    assert row.reciprocal_fitted == pytest.approx(
        counted, abs=3 * np.sqrt(counted / 4000)
    )
    cells = pd.read_parquet(run / "cells.parquet")
    edges = pd.read_parquet(run / "edges.parquet")
    chosen = cells.cell_type.astype(str) == "pyramid"
    place = cells[["x_um", "y_um", "z_um"]].to_numpy()
    ids = np.flatnonzero(chosen)
    linked = set(zip(edges.pre_cell_id, edges.post_cell_id, strict=True))
    near = [
        (i, j)
        for i in ids
        for j in ids
        if i < j and np.linalg.norm(place[i] - place[j]) <= 100
    ]
    both = np.mean([(i, j) in linked and (j, i) in linked for i, j in near])
    assert row.reciprocal_realised == pytest.approx(both)
    # Drawn dyads: four standard deviations, false alarm 1 in 16,000.
    spread = np.sqrt(counted * (1 - counted) / len(near))
    assert abs(both - row.reciprocal_fitted) < 4 * spread
    pairs = pd.read_parquet(run / "pairs.parquet")
    chance = pairs.set_index(["pre_cell_id", "post_cell_id"]).p_connect
    p, q = (
        chance.reindex([pair[::way] for pair in near]).fillna(0).to_numpy(float)
        for way in (1, -1)
    )
    assert row.reciprocal_fitted > 1.3 * (p * q).mean()


def _law_table(most, law):
    """P(seen | a, lost) by direct simulation of draw and cut would take a sum; exact."""
    laws = Laws(*(np.array([[x]]) for x in (law.t0, law.t1, law.t2)))
    out = np.zeros((most + 1, most + 1))
    for a in range(1, most + 1):
        for lost in range(a + 1):
            histogram = np.zeros((a + 1, a + 1))
            histogram[a, lost] = 1.0
            out[a, lost] = show(laws, {0: histogram}).probability[0]
    return out


@pytest.mark.parametrize(("a", "lost"), [(1, 0), (3, 1), (6, 5), (9, 3), (4, 4)])
def test_the_slice_formula_equals_drawing_and_cutting(a, lost):
    """100,000 pairs drawn and cut; four standard errors, false alarm 1 in 16,000."""
    law, n = Law(-1.0, -0.4, 0.05), 100_000
    random = np.random.default_rng(7)
    sizes = random.choice(a + 1, size=n, p=size_distribution(a, law))
    # Each synapse falls on a site of its own: how many fall on kept ones.
    kept = random.hypergeometric(sizes, a - sizes, a - lost) if a > lost else 0 * sizes
    seen = (kept > 0).mean()
    p = _law_table(a, law)[a, lost]
    assert abs(seen - p) <= 4 * np.sqrt(p * (1 - p) / n)


def test_cutting_the_arbors_and_searching_again_shows_the_same(run):
    """Arbors are really cut at the two planes of a slice, and searched anew.

    Only thinning can differ: a site that lay next to a lost, closer one.
    """
    circuit = ReopenedCircuit(run)
    cells = circuit.cells
    chosen = np.flatnonzero(cells.type_index == 0)[:24]
    cut = Slice(150.0, 40.0, 70.0)
    law, rules = Law(-1.2, -0.5), circuit.spec.appositions
    scene = circuit.scene(
        cells.arbor_index[chosen], cells.position_um[chosen], cells.azimuth_deg[chosen]
    )
    everyone = np.arange(chosen.size)
    sites = find_appositions(index_targets(scene, everyone), everyone)
    offset = cells.position_um[chosen][sites.post] - cells.position_um[chosen][sites.pre]
    placed = place_slices(3, cut, sites.pre, sites.post, offset, 1)
    held = np.flatnonzero(placed.weight[:, 0] > 0)[::3][:60]
    sides = [
        (cells.arbor_index[chosen][ends], cells.azimuth_deg[chosen][ends])
        for ends in (sites.pre, sites.post)
    ]
    columns = (sites.pre_segment, sites.pre_fraction.astype(float))
    columns += (sites.post_segment, sites.post_fraction.astype(float))
    kept = kept_sites(
        make_paths(circuit.arbors), cut, placed, sides, sites.first, columns, offset
    )[:, 0]
    table = _law_table(int(sites.count.max()), law)
    formula, really, same = [], [], 0
    for pair in held:
        ends = chosen[[sites.pre[pair], sites.post[pair]]]
        across, near = placed.across[pair, 0], placed.near_um[pair, 0]
        depths = near, near + float(across @ offset[pair, :2])
        arbors = [
            cut_arbor(circuit.arbors[cells.arbor_index[c]], cells.azimuth_deg[c],
                      across, depth, cut.thickness_um)
            for c, depth in zip(ends, depths, strict=True)
        ]  # fmt: skip
        alone = make_scene(
            arbors,
            arbor_index=np.array([0, 1]),
            position_um=cells.position_um[ends],
            azimuth_deg=cells.azimuth_deg[ends],
            target_mask=scene.placed.mask[[sites.pre[pair], sites.post[pair]]],
            max_gap_um=rules.max_gap_um,
            min_spacing_um=rules.min_spacing_um,
            autapses=False,
            wrap_um=(0.0, 0.0),
        )
        again = find_appositions(
            index_targets(alone, np.array([1])), np.array([0]), threads=1
        )
        found, a = int(again.count.sum()), int(sites.count[pair])
        same += found == kept[pair]
        formula.append(table[a, a - kept[pair]])
        # Those found again are what is left of the pair's a sites.
        really.append(table[a, a - min(found, a)])
    assert same >= 0.9 * held.size
    assert 0 < np.mean(formula) < 0.98 * np.mean(table[sites.count[held], 0])
    assert np.mean(really) == pytest.approx(np.mean(formula), rel=0.03)


def test_dyads_without_reciprocal_rows_are_empty(run):
    circuit = ReopenedCircuit(run)
    dyads = Dyads(circuit, [], iter(()))
    ids = np.arange(3)
    assert (dyads.appositions(ids, ids + 1) == 0).all()
