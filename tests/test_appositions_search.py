"""The search finds exactly what trying everything finds, however it is cut up."""

from __future__ import annotations

import numpy as np
import pytest
from builders import ALL_TARGETS, arbor_from_segments, random_scene
from oracles_appositions import brute_force

from circuitgen.appositions import find_appositions, index_targets, make_scene
from circuitgen.morphology.arbor import Kind


def search(scene, *, blocks=1, threads=1):
    """Search all cells in blocks; return {(pre, post): sites} with everything in it."""
    everyone = np.arange(scene.placed.arbor.size)
    index, found = index_targets(scene, everyone), {}
    for pre_cells in np.array_split(everyone, blocks):
        part = find_appositions(index, pre_cells, threads)
        pairs = list(zip(part.pre.tolist(), part.post.tolist(), strict=True))
        assert pairs == sorted(pairs)
        for row, pair in enumerate(pairs):
            sites = slice(part.first[row], part.first[row + 1])
            found[pair] = (
                part.pre_segment[sites].tolist(),
                part.post_segment[sites].tolist(),
                part.pre_fraction[sites].tolist(),
                part.post_fraction[sites].tolist(),
                part.gap_um[sites].tolist(),
            )
    return found


def assert_equal_to_brute_force(found, expected):
    assert set(found) == set(expected)
    for pair, hits in expected.items():
        gap, pre_segment, post_segment, s, t, _ = zip(*hits, strict=True)
        sites = found[pair]
        assert sites[0] == list(pre_segment)
        assert sites[1] == list(post_segment)
        # Fractions are kept in single precision.
        np.testing.assert_allclose(sites[2], s, atol=1e-6)
        np.testing.assert_allclose(sites[3], t, atol=1e-6)
        np.testing.assert_allclose(sites[4], gap, atol=1e-6)


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize(
    "case",
    [
        {},
        {"wrap": True, "box_um": 70.0, "cells": 3},
        {"autapses": True},
        {"max_gap_um": 0.0},
        {"max_gap_um": 20.0, "cells": 4},
        {"min_spacing_um": 9.0},
        {"box_um": 5.0, "cells": 5},
    ],
    ids=["open", "wrap", "autapses", "gap 0", "gap 20", "spacing 9", "crowded"],
)
def test_search_equals_brute_force(seed, case):
    case = {"cells": 6, **case}
    scene, arbors, arguments = random_scene(np.random.default_rng(seed), **case)
    expected = brute_force(arbors, arguments, copies=2 if case.get("wrap") else 0)
    assert_equal_to_brute_force(search(scene), expected)


@pytest.mark.parametrize("wrap", [False, True])
def test_answer_does_not_depend_on_blocks_or_threads(wrap):
    scene, _, _ = random_scene(
        np.random.default_rng(3), cells=40, box_um=90.0, wrap=wrap, max_gap_um=2.0
    )
    whole = search(scene)
    assert sum(len(sites[0]) for sites in whole.values()) > 60
    for blocks, threads in [(2, 1), (7, 2), (40, 3), (1, 8)]:
        assert search(scene, blocks=blocks, threads=threads) == whole


def test_reordering_cells_only_renames_them():
    _, arbors, arguments = random_scene(np.random.default_rng(4), cells=12)
    order = np.random.default_rng(5).permutation(12)
    moved = {
        name: value[order] if isinstance(value, np.ndarray) else value
        for name, value in arguments.items()
    }
    first = search(make_scene(arbors, **arguments))
    second = search(make_scene(arbors, **moved))
    assert {(order[i], order[j]): sites for (i, j), sites in second.items()} == first


def test_shifting_a_periodic_box_changes_no_site():
    rng = np.random.default_rng(6)
    _, arbors, arguments = random_scene(rng, cells=10, box_um=60.0, wrap=True)
    first = search(make_scene(arbors, **arguments))
    assert first
    for shift in ([17.3, -5.1, 0.0], [60.0, 30.0, 0.0]):
        moved = dict(arguments, position_um=arguments["position_um"] + shift)
        second = search(make_scene(arbors, **moved))
        assert set(second) == set(first)
        for pair, sites in first.items():
            assert second[pair][:2] == sites[:2]


def test_far_from_the_origin_only_rounding_changes():
    _, arbors, arguments = random_scene(np.random.default_rng(7), cells=10)
    first = search(make_scene(arbors, **arguments))
    moved = dict(arguments, position_um=arguments["position_um"] + 1e5)
    second = search(make_scene(arbors, **moved))
    assert set(second) == set(first)
    for pair, sites in first.items():
        assert second[pair][:2] == sites[:2]


def _scene_of(arbors, positions, **rules):
    n = len(positions)
    return make_scene(
        arbors,
        arbor_index=np.arange(n) % len(arbors),
        position_um=np.array(positions, float),
        azimuth_deg=np.zeros(n),
        target_mask=np.full(n, ALL_TARGETS),
        **{"max_gap_um": 0.5, "min_spacing_um": 4.0, **rules},
    )


def _straight(kind, length_um, pieces, radius=0.2):
    """A soma far away and one straight cable along x, cut into equal pieces."""
    ends = np.linspace(0, length_um, pieces + 1)
    points = np.column_stack([ends, np.zeros(pieces + 1), np.zeros(pieces + 1)])
    soma = [[0.0, 0.0, 5000.0]]
    return arbor_from_segments(
        np.vstack([soma, points[:-1]]),
        np.vstack([soma, points[1:]]),
        [Kind.SOMA, *[kind] * pieces],
        [5.0, *[radius] * pieces],
    )


def test_long_parallel_run_gives_one_site_per_spacing():
    axon, dendrite = _straight(Kind.AXON, 80.0, 20), _straight(Kind.BASAL, 80.0, 20)
    scene = _scene_of([axon, dendrite], [[0, 0, 0], [0, 0.6, 0]])
    (sites,) = search(scene).values()
    places = np.sort(np.array(sites[0]) - 1 + np.array(sites[2])) * 4.0
    assert np.diff(places).min() >= 4.0 - 1e-6
    # No stretch of two spacings is left without a site.
    assert np.diff(places).max() < 8.0
    assert len(places) >= 80.0 / 8.0


def test_a_crossing_gives_one_site():
    axon = _straight(Kind.AXON, 40.0, 10)
    across = arbor_from_segments(
        [[0, 0, 5000.0], [18.1, -10, 0], [18.1, 0, 0]],
        [[0, 0, 5000.0], [18.1, 0, 0], [18.1, 10, 0]],
        [Kind.SOMA, Kind.BASAL, Kind.BASAL],
        [5.0, 0.3, 0.3],
    )
    scene = _scene_of([axon, across], [[0, 0, 0], [0, 0, 0.3]])
    (sites,) = search(scene).values()
    assert len(sites[0]) == 1


@pytest.mark.parametrize("targets", [1, 2, 4, 8])
def test_only_wanted_targets_are_contacted(targets):
    scene, arbors, arguments = random_scene(
        np.random.default_rng(8), cells=10, box_um=25.0, max_gap_um=3.0
    )
    arguments["target_mask"][:] = targets
    found = search(make_scene(arbors, **arguments))
    assert found
    wanted = {1: Kind.SOMA, 2: Kind.AXON, 4: Kind.BASAL, 8: Kind.APICAL}[targets]
    for (_, post), sites in found.items():
        arbor = arbors[arguments["arbor_index"][post]]
        assert (arbor.kind[sites[1]] == wanted).all()
        if targets == 2:
            assert arbor.initial[sites[1]].all()


def test_no_axon_and_one_cell_give_nothing():
    scene = _scene_of([_straight(Kind.BASAL, 40.0, 10)], [[0, 0, 0], [0, 0.5, 0]])
    assert search(scene) == {}
    scene, arbors, arguments = random_scene(np.random.default_rng(9), cells=1)
    assert search(scene) == {}


def test_one_reconstruction_at_one_azimuth_and_a_very_long_axon():
    rng = np.random.default_rng(10)
    _, arbors, arguments = random_scene(rng, cells=5, arbors=1, box_um=8.0)
    arguments["azimuth_deg"][:] = 90.0
    expected = brute_force(arbors, arguments)
    assert_equal_to_brute_force(search(make_scene(arbors, **arguments)), expected)
    points = np.cumsum(rng.normal(0, 2.0, (50_001, 3)), axis=0) % 60.0
    long_axon = arbor_from_segments(
        np.vstack([[[0, 0, 0]], points[:-1]]),
        np.vstack([[[0, 0, 0]], points[1:]]),
        [Kind.SOMA, *[Kind.AXON] * 50_000],
        [5.0, *[0.1] * 50_000],
    )
    assert long_axon.length_um.sum() > 200_000
    scene = _scene_of([long_axon, arbors[0]], [[0, 0, 0], [30, 30, 30]])
    assert search(scene, blocks=2) == search(scene)


def test_target_exactly_on_a_voxel_face_is_found():
    # All coordinates are multiples of the voxel sizes that this radius leads to.
    for shift in np.arange(0, 4.2, 0.1):
        axon = _straight(Kind.AXON, 8.0, 2)
        dendrite = _straight(Kind.BASAL, 8.0, 2)
        scene = _scene_of([axon, dendrite], [[shift, shift, shift]] * 2)
        assert len(search(scene)) == 1
