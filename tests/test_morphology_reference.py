"""Cable of real reconstructions against a reference library.

The files are five real reconstructions (fly neurons, electron microscopy) that ship as
examples in the PyPI package navis; their unit is 8 nm, which changes no comparison.
Expected values come from navis itself, at the time of the test.
"""

import warnings
from pathlib import Path

import numpy as np
import pytest
from builders_morphology import read_table, write_table

from circuitgen.morphology import Kind, build_arbor, read_reconstruction

with warnings.catch_warnings():
    # Its imports warn of their own dependencies.
    warnings.simplefilter("ignore")
    import navis

FILES = sorted((Path(navis.__file__).parent / "data" / "swc").glob("*.swc"))
UNIT_UM = 0.008


def reference(path):
    """Read a file by the reference library, in double precision."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return navis.read_swc(path, precision=64)


def test_five_files_are_compared():
    assert len(FILES) == 5


@pytest.fixture(params=FILES, ids=lambda path: path.stem, scope="module")
def pair(request):
    """Return the reference library's neuron and our reconstruction of one file."""
    return reference(request.param), read_reconstruction(request.param)


def test_cable_length_is_that_of_the_reference_library(pair):
    neuron, reconstruction = pair
    # Both add some 5,000 lengths in double precision.
    expected = neuron.cable_length
    assert reconstruction.cable_length_um == pytest.approx(expected, rel=1e-12)


def test_every_piece_is_that_of_the_reference_library(pair):
    """Sample by sample; what was left out is only what the findings say."""
    neuron, r = pair
    nodes = neuron.nodes.set_index("node_id")
    place = nodes[["x", "y", "z"]]
    child = nodes[nodes.parent_id >= 0]
    ends, begins = place.loc[child.index], place.loc[child.parent_id]
    length = np.linalg.norm(ends.to_numpy() - begins.to_numpy(), axis=1)
    expected = dict(zip(child.index.tolist(), length.tolist(), strict=True))
    real = (r.parent >= 0) & ~r.bridged
    ours = np.linalg.norm(r.position_um - r.begin_um, axis=1)[real].tolist()
    ours = dict(zip(r.piece[real].tolist(), ours, strict=True))
    dropped = [f for f in r.findings if f.code == "loose_dropped"]
    assert set(ours) <= set(expected)
    assert set(ours) == set(expected) or dropped
    assert len(ours) > 0.99 * len(expected)
    assert ours == pytest.approx({n: expected[n] for n in ours}, rel=1e-12, abs=1e-12)


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_path_lengths_of_an_arbor_are_those_of_the_reference_library(tmp_path, path):
    """In micrometres, as cells are; soma of no extent: paths begin at its centre."""
    table = read_table(path)
    table[:, 2:6] *= UNIT_UM
    largest = tree_of(table)
    root = np.flatnonzero(largest[:, 6] == -1)[0]
    largest[root, 1], largest[root, 5] = 1, 1e-9
    other = np.arange(len(largest)) != root
    largest[other, 1] = Kind.AXON
    neuron = reference(write_table(tmp_path / "um.swc", largest))
    r = read_reconstruction(tmp_path / "um.swc")
    arbor = build_arbor(r, upright="y", min_spacing_um=4.0, ais_um=40.0)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        tips = neuron.nodes[neuron.nodes.type == "end"].node_id.to_numpy()
        away = navis.geodesic_matrix(neuron, from_=neuron.root, directed=False)
    expected = away.loc[neuron.root[0], tips].max()
    # The soma takes 1e-9 um from every path.
    assert arbor.path_end_um.max() == pytest.approx(expected, rel=1e-9)
    cable = (arbor.path_end_um - arbor.path_um).sum()
    assert cable == pytest.approx(neuron.cable_length, rel=1e-9)
    assert arbor.length_um.sum() <= cable


def tree_of(table):
    """Return the largest tree of a table."""
    root = {}
    above = dict(zip(table[:, 0].tolist(), table[:, 6].tolist(), strict=True))
    for number in above:
        here = number
        while above[here] != -1:
            here = above[here]
        root[number] = here
    roots = np.array([root[number] for number in table[:, 0].tolist()])
    names, counts = np.unique(roots, return_counts=True)
    return table[roots == names[counts.argmax()]].copy()
