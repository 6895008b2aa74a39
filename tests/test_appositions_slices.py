"""Slices: chance of a pair to be patched, and the sites that cut arbors keep."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from oracles_slices import stays_inside

from circuitgen.appositions import (
    Slice,
    kept_sites,
    make_paths,
    pair_weight,
    place_slices,
)
from circuitgen.morphology import build_arbor, read_reconstruction

CUT = Slice(thickness_um=300.0, soma_low_um=40.0, soma_high_um=90.0)
DISTANCES_UM = np.array([0.0, 10.0, 49.0, 50.0, 70.0, 400.0])


def test_the_chance_of_a_pair_is_the_mean_over_directions():
    """Against the integral over directions, by the rectangle rule."""
    angle = (np.arange(100_000) + 0.5) * 2 * np.pi / 100_000
    room = 1 - np.abs(DISTANCES_UM[:, None] * np.cos(angle)) / CUT.range_um
    expected = np.maximum(room, 0).mean(axis=1)
    # The integrand has kinks: the rule's error is of the order of 1 / n.
    assert pair_weight(DISTANCES_UM, CUT) == pytest.approx(expected, abs=1e-5)


def test_placements_follow_the_chance_and_keep_both_somata_in_range():
    ids = np.arange(DISTANCES_UM.size)
    offset = np.column_stack([DISTANCES_UM, 0 * DISTANCES_UM, 30.0 + DISTANCES_UM])
    placed = place_slices(5, CUT, ids, ids + 10, offset, 2000)
    # Strata of 2,000 directions: the sum misses the integral by less than one stratum.
    assert placed.weight.sum(axis=1) == pytest.approx(
        pair_weight(DISTANCES_UM, CUT), abs=1 / 500
    )
    other = placed.near_um + np.einsum("ijk,ik->ij", placed.across, offset[:, :2])
    held = placed.weight > 0
    for depth in (placed.near_um[held], other[held]):
        assert depth.min() >= CUT.soma_low_um - 1e-9
        assert depth.max() <= CUT.soma_high_um + 1e-9
    assert np.linalg.norm(placed.across, axis=2) == pytest.approx(1.0)


def test_placements_depend_on_their_pair_alone():
    offset = np.array([[10.0, 5.0, 0.0], [3.0, -20.0, 8.0], [0.0, 1.0, 2.0]])
    pre, post = np.array([4, 9, 2]), np.array([7, 1, 3])
    whole = place_slices(1, CUT, pre, post, offset, 6, row=3)
    for i in range(3):
        one = place_slices(1, CUT, pre[[i]], post[[i]], offset[[i]], 6, row=3)
        assert (one.near_um[0] == whole.near_um[i]).all()
        assert (one.across[0] == whole.across[i]).all()
    other_row = place_slices(1, CUT, pre, post, offset, 6, row=4)
    assert (other_row.near_um != whole.near_um).any()


@pytest.fixture(scope="module")
def arbors():
    paths = sorted((Path(__file__).parents[1] / "morphologies").glob("*.swc"))[:3]
    return [
        build_arbor(read_reconstruction(p), upright="y", min_spacing_um=4.0, ais_um=40.0)
        for p in paths
    ]


def test_kept_sites_equal_the_slow_walk(arbors):
    """Random sites on real stand-ins: the compiled walk against a plain one."""
    random = np.random.default_rng(8)
    pairs_n, each = 12, 15
    pre_arbor, post_arbor = random.integers(0, 3, (2, pairs_n))
    azimuth = random.uniform(0, 360, (2, pairs_n))
    offset = random.uniform(-40, 40, (pairs_n, 3))
    first = np.arange(pairs_n + 1) * each
    sizes = np.array([arbor.segments_n for arbor in arbors])
    axon = random.integers(0, np.repeat(sizes[pre_arbor], each))
    target = random.integers(0, np.repeat(sizes[post_arbor], each))
    fractions = random.uniform(0, 1, (2, axon.size))
    ids = np.arange(pairs_n)
    placed = place_slices(2, CUT, ids, ids + 50, offset, 4)
    sites = (axon, fractions[0], target, fractions[1])
    cells = ((pre_arbor, azimuth[0]), (post_arbor, azimuth[1]))
    kept = kept_sites(make_paths(arbors), CUT, placed, cells, first, sites, offset)
    expected = np.zeros_like(kept)
    for i in range(pairs_n):
        for j in range(4):
            across, near = placed.across[i, j], placed.near_um[i, j]
            apart = float(across @ offset[i, :2])
            for s in range(first[i], first[i + 1]):
                expected[i, j] += stays_inside(
                    arbors[pre_arbor[i]], azimuth[0, i], axon[s], fractions[0, s],
                    across, near, CUT.thickness_um,
                ) and stays_inside(
                    arbors[post_arbor[i]], azimuth[1, i], target[s], fractions[1, s],
                    across, near + apart, CUT.thickness_um,
                )  # fmt: skip
    assert (kept == expected).all()
    assert 0 < kept.sum() < 4 * axon.size
