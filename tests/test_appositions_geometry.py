"""Numbers of close approaches against integral geometry.

For isotropic, uniformly placed straight wires the expected number of pairs whose
centre lines come within d is (pi / 2) d L_a L_d / V (the potential-synapse argument of
Stepanyants, Hof & Chklovskii 2002, Neuron 34:275; mean |sin| of the angle between
random directions is pi / 4), plus terms for the ends of the wires: a capsule around a
segment also has half-spheres. For one pair of lengths l_a, l_d the volume of relative
positions with distance below d is (pi / 2) d l_a l_d + pi d^2 (l_a + l_d) + 4/3 pi d^3.
"""

from __future__ import annotations

import numpy as np
import pytest
from builders import arbor_from_segments

from circuitgen.appositions import find_appositions, index_targets, make_scene
from circuitgen.morphology.arbor import Kind

BOX_UM = 200.0
CELLS = 60
WIRES = 60
HEIGHT_UM = 400.0
# The soma stands aside so that it meets nothing.
ASIDE_UM = 3000.0


def _wires(rng, kind, lengths):
    """An arbor of straight wires at random in the periodic box, isotropic."""
    n = len(lengths)
    way = rng.normal(size=(n, 3))
    way /= np.linalg.norm(way, axis=1, keepdims=True)
    middle = rng.uniform(0, 1, (n, 3)) * [BOX_UM, BOX_UM, HEIGHT_UM]
    half = way * lengths[:, None] / 2
    soma = np.array([[0.0, 0.0, ASIDE_UM]])
    return arbor_from_segments(
        np.vstack([soma, middle - half]),
        np.vstack([soma, middle + half]),
        [Kind.SOMA, *[kind] * n],
        [0.1, *[0.0] * n],
    )


@pytest.mark.parametrize("gap_um", [1.0, 2.5])
@pytest.mark.parametrize("mixture", [(4.0,), (1.0, 3.5)], ids=["one length", "two"])
def test_close_approaches_follow_integral_geometry(gap_um, mixture):
    # False-alarm rate: counts are sums of rare independent events, so Poisson but for
    # correlations within a wire; a limit of 4 sd is passed by chance about once in
    # 16,000. The box is open in z: wires near its floor and ceiling have fewer
    # neighbours, so only targets farther inside than a wire and the gap are expected
    # to see the full density.
    rng = np.random.default_rng(11)
    lengths = np.resize(mixture, WIRES)
    margin = max(mixture) + gap_um
    axons = [_wires(rng, Kind.AXON, lengths) for _ in range(CELLS)]
    targets = [_wires(rng, Kind.BASAL, lengths) for _ in range(CELLS)]
    scene = make_scene(
        axons + targets,
        arbor_index=np.arange(2 * CELLS),
        position_um=np.zeros((2 * CELLS, 3)),
        azimuth_deg=np.zeros(2 * CELLS),
        target_mask=np.full(2 * CELLS, 4),
        max_gap_um=gap_um,
        # So small a spacing drops nothing: every pair of wires counts by itself.
        min_spacing_um=1e-9,
        wrap_um=(BOX_UM, BOX_UM),
    )
    index = index_targets(scene, np.arange(CELLS, 2 * CELLS))
    found = find_appositions(index, np.arange(CELLS))
    post = np.repeat(found.post, found.count)
    middle_z = np.zeros(post.size)
    for cell in range(CELLS, 2 * CELLS):
        mine = post == cell
        arbor = targets[cell - CELLS]
        segment = found.post_segment[mine]
        middle_z[mine] = (arbor.start_um[segment, 2] + arbor.end_um[segment, 2]) / 2
    inside = (middle_z > margin) & (middle_z < HEIGHT_UM - margin)
    share = (HEIGHT_UM - 2 * margin) / HEIGHT_UM
    volume = BOX_UM**2 * HEIGHT_UM
    a, b = np.meshgrid(lengths, lengths)
    room = np.pi / 2 * gap_um * a * b + np.pi * gap_um**2 * (a + b)
    room += 4 / 3 * np.pi * gap_um**3
    expected = CELLS**2 * room.sum() / volume * share
    assert abs(inside.sum() - expected) < 4 * np.sqrt(expected)
    # The leading term alone, as published, is what long thin wires tend to.
    leading = np.pi / 2 * gap_um * lengths.sum() ** 2 * CELLS**2 / volume * share
    assert leading < expected


def test_published_probability_of_one_pair():
    # facts of the same argument: wires 30 and 20 um long, d = 2 um, V = 1e6 um3 give
    # (pi / 2) d L_a L_d / V = 0.001885.
    assert np.pi / 2 * 2 * 30 * 20 / 1e6 == pytest.approx(0.001885, abs=1e-6)
