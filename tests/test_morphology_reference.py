"""Cable lengths of real reconstructions against a reference library.

The files are five real reconstructions that ship with the library navis
(https://navis-org.github.io/navis) as examples; their unit does not matter here.
"""

import warnings
from pathlib import Path

import numpy as np
import pytest

from circuitgen.morphology import build_arbor, read_reconstruction

with warnings.catch_warnings():
    # Its imports warn of their own dependencies.
    warnings.simplefilter("ignore")
    import navis

FILES = sorted((Path(navis.__file__).parent / "data" / "swc").glob("*.swc"))


def test_five_files_are_compared():
    assert len(FILES) == 5


@pytest.fixture(params=FILES, ids=lambda path: path.stem)
def pair(request):
    """Return the reference library's neuron and our reconstruction of one file."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        neuron = navis.read_swc(request.param, precision=64)
    return neuron, read_reconstruction(request.param)


def test_cable_length_is_that_of_the_reference_library(pair):
    neuron, reconstruction = pair
    # Both add some 5,000 lengths in double precision; the library rounds nothing.
    assert reconstruction.file_cable_um == pytest.approx(neuron.cable_length, rel=1e-9)


def test_pieces_of_an_arbor_are_those_of_the_reference_library(pair):
    neuron, reconstruction = pair
    nodes = neuron.nodes.set_index("node_id")
    place = nodes[["x", "y", "z"]]
    child = nodes[nodes.parent_id >= 0]
    length = np.linalg.norm(
        place.loc[child.index].to_numpy() - place.loc[child.parent_id].to_numpy(), axis=1
    )
    expected = dict(zip(child.index.tolist(), length.tolist(), strict=True))
    arbor = build_arbor(reconstruction, upright="y", min_spacing_um=50.0, ais_um=40.0)
    ours = dict(
        zip(
            arbor.piece_number.tolist(),
            np.diff(arbor.piece_bounds_um).tolist(),
            strict=True,
        )
    )
    dropped = sum(f.text.endswith("dropped") for f in reconstruction.findings)
    compared = [n for n in expected if n in ours]
    assert len(compared) == len(expected) or dropped
    assert len(compared) > 0.9 * len(expected)
    wrong = [n for n in compared if abs(ours[n] - expected[n]) > 1e-6]
    assert wrong == []
