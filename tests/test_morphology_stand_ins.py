"""The shipped stand-ins, read and built by the package itself."""

import re
from pathlib import Path

import numpy as np
import pytest
from builders_morphology import arbor_of, read_table

from circuitgen.morphology import Kind, read_reconstruction

FILES = sorted((Path(__file__).parents[1] / "morphologies").glob("*.swc"))
TUFTED = ("L23_pyramidal", "L4_pyramidal", "L5_slender", "L5_thick")
LAYER_1_UM = 120.0


def test_about_40_files_or_more_are_shipped():
    assert len(FILES) >= 40


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_a_stand_in_needs_no_repair_and_no_warning(path):
    r = read_reconstruction(path)
    assert r.findings == ()
    table = read_table(path)
    place = {int(n): i for i, n in enumerate(table[:, 0])}
    above = [place.get(int(n), i) for i, n in enumerate(table[:, 6])]
    steps = table[:, 2:5] - table[above, 2:5]
    assert r.cable_length_um == pytest.approx(np.linalg.norm(steps, axis=1).sum())


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_built_upright_the_arbor_lies_below_the_pia_and_tufts_reach_layer_1(path):
    (soma_um,) = re.findall(r"soma (\d+) um below the pia", path.read_text())
    arbor = arbor_of(path)
    ends = np.concatenate([arbor.start_um, arbor.end_um])
    depth = float(soma_um) - ends[:, 2]
    assert depth.min() > 0
    if path.stem.rpartition("_")[0] in TUFTED:
        apical = np.tile(arbor.kind == Kind.APICAL, 2)
        assert depth[apical].min() < LAYER_1_UM


@pytest.mark.parametrize("path", FILES[::6], ids=lambda path: path.stem)
def test_an_arbor_has_the_cable_of_its_file_but_for_the_soma(path):
    """Simplified within 0.1 um: a gently bending course loses less than 2 %."""
    arbor = arbor_of(path)
    neurite = arbor.kind != Kind.SOMA
    r = read_reconstruction(path)
    stems = (arbor.parent[neurite] == -1).sum()
    inside = arbor.soma_radius_um * stems
    path_um = (arbor.path_end_um - arbor.path_um)[neurite].sum()
    # Two decimals put a stem's first sample up to 0.005 sqrt(3) um off the surface.
    off_um = 0.005 * np.sqrt(3) * stems
    assert path_um == pytest.approx(r.cable_length_um - inside, abs=off_um)
    assert 0.98 * path_um < arbor.length_um[neurite].sum() <= path_um + 1e-6
