"""Loading a spec: one mistake each, many at once, and what a valid spec gives."""

import time

import pytest

from circuitgen.core.errors import InputError
from circuitgen.spec import load_spec

SPEC = """\
name: small
seed: 5
column:
  shape: box
  width_um: 100
  length_um: 80
  edges: wrap
layers:
- {name: upper, thickness_um: 100}
- name: lower
  thickness_um: 200.5
cell_types:
  stellate:
    sign: excitatory
    density_per_mm3: {upper: 5e4}
    morphologies: cells/stellate_*.swc
    targets: [basal, apical]
  basket:
    sign: inhibitory
    count:
      upper: 4
      lower: 7
    morphologies: [cells/basket.swc]
    upright: -z
    soma_radius_um: 6
    ais_um: 30
groups:
  all_cells: [stellate, basket]
appositions: {max_gap_um: 0.25}
recordings: recordings.csv
conduction: {axon_um_per_ms: 250}
"""
SWC = "1 1 0 0 0 5 -1\n2 2 0 -40 0 0.3 1\n3 3 0 40 0 0.5 1\n"
CSV = """\
source,pre_type,post_type,tested_n,connected_n
invented,stellate,basket,20,5
invented,all_cells,stellate,30,3
"""


@pytest.fixture
def folder(tmp_path):
    """Return a folder with a small valid spec and everything that it names."""
    (tmp_path / "cells").mkdir()
    for name in ("stellate_1", "stellate_2", "basket"):
        (tmp_path / "cells" / f"{name}.swc").write_text(SWC)
    (tmp_path / "spec.yaml").write_text(SPEC)
    (tmp_path / "recordings.csv").write_text(CSV)
    return tmp_path


def changed(folder, old, new):
    """Replace text that stands once in the valid spec; return the spec's path."""
    assert SPEC.count(old) == 1
    path = folder / "spec.yaml"
    path.write_text(SPEC.replace(old, new))
    return path


def problems_of(path):
    with pytest.raises(InputError) as caught:
        load_spec(path)
    return caught.value.problems


def test_a_valid_spec_loads_as_written(folder):
    spec = load_spec(folder / "spec.yaml")
    assert (spec.name, spec.seed, spec.text) == ("small", 5, SPEC)
    assert spec.thickness_um == 300.5
    assert spec.layer_bounds_um == ((200.5, 300.5), (0.0, 200.5))
    assert spec.type_names == ("stellate", "basket")
    assert spec.members("all_cells") == (0, 1)
    assert spec.members("basket") == (1,)
    stellate, basket = spec.cell_types
    assert stellate.is_excitatory
    assert not basket.is_excitatory
    assert stellate.density_per_mm3 == {"upper": 50_000.0}
    assert basket.count == {"upper": 4, "lower": 7}
    assert [f.name for f in stellate.morphologies] == [
        "stellate_1.swc",
        "stellate_2.swc",
    ]
    assert (stellate.upright, basket.upright) == ("y", "-z")
    assert (stellate.ais_um, basket.ais_um) == (40.0, 30.0)
    assert (stellate.soma_radius_um, basket.soma_radius_um) == (None, 6.0)
    assert basket.targets == ("soma", "basal", "apical")
    assert spec.appositions.max_gap_um == 0.25
    assert spec.appositions.min_spacing_um == 4.0
    assert (spec.conduction.axon_um_per_ms, spec.conduction.synaptic_delay_ms) == (
        250.0,
        0.5,
    )
    assert [r.row for r in spec.recordings] == [1, 2]
    assert [r.line for r in spec.recordings] == [2, 3]
    names = ["basket.swc", "stellate_1.swc", "stellate_2.swc", "recordings.csv"]
    assert sorted(f.name for f in spec.input_files) == sorted(names)


# old text, new text: line, field, words of the rule, nearest name
MISTAKES = {
    # Keys.
    ("seed: 5", "seed: 5\nsed: 6"): (3, "sed", "is not a known key", "seed"),
    ("  edges: wrap", "  egdes: wrap"): (
        7,
        "column.egdes",
        "is not a known key",
        "edges",
    ),
    ("    ais_um: 30", "    aiss_um: 30"): (
        26,
        "cell_types.basket.aiss_um",
        "is not a known key",
        "ais_um",
    ),
    ("upper, thickness_um", "upper, hue: 1, thickness_um"): (
        9,
        "layers.0.hue",
        "is not a known key",
        None,
    ),
    ("seed: 5\n", "seed: 5\nseed: 6\n"): (3, "seed", "is given twice", None),
    ("  basket:", "  stellate:"): (
        18,
        "cell_types.stellate",
        "(first on line 13)",
        None,
    ),
    ("name: small\n", ""): (1, "name", "is missing", None),
    ("seed: 5\n", ""): (1, "seed", "is missing", None),
    ("  shape: box\n", ""): (3, "column.shape", "is missing", None),
    ("  thickness_um: 200.5\n", ""): (10, "layers.1.thickness_um", "is missing", None),
    ("    sign: inhibitory\n", ""): (18, "cell_types.basket.sign", "is missing", None),
    ("    morphologies: cells/stellate_*.swc\n", ""): (
        13,
        "cell_types.stellate.morphologies",
        "is missing",
        None,
    ),
    # Values of the wrong type.
    ("seed: 5", "seed: five"): (2, "seed", "= 'five' must be a whole number", None),
    ("seed: 5", "seed: 5.5"): (2, "seed", "= 5.5 must be a whole number", None),
    ("seed: 5", "seed: true"): (2, "seed", "= True must be a whole number", None),
    ("seed: 5", "seed: -5"): (2, "seed", "= -5 must be >= 0", None),
    ("seed: 5", f"seed: {2**64}"): (2, "seed", "must be < 1.84467e+19", None),
    ("name: small", "name: 12"): (1, "name", "= 12 must be text", None),
    ("name: small", "name: ''"): (1, "name", "must not be empty", None),
    ("name: small", f"name: {'x' * 81}"): (1, "name", "80 characters at most", None),
    ("upper: 4", "upper: 4.5"): (
        21,
        "cell_types.basket.count.upper",
        "= 4.5 must be a whole number",
        None,
    ),
    ("200.5", "'200.5'"): (
        11,
        "layers.1.thickness_um",
        "= '200.5' must be a number",
        None,
    ),
    ("200.5", "[200.5]"): (11, "layers.1.thickness_um", "must be a number", None),
    ("200.5", ""): (11, "layers.1.thickness_um", "= nothing must be a number", None),
    ("all_cells: [stellate, basket]", "all_cells: {stellate: 1}"): (
        28,
        "groups.all_cells",
        "must be a list",
        None,
    ),
    ("{max_gap_um: 0.25}", "0.25"): (29, "appositions", "'key: value' lines", None),
    ("recordings: recordings.csv", "recordings: 3"): (
        30,
        "recordings",
        "= 3 must be text or a list",
        None,
    ),
    ("recordings: recordings.csv", "recordings: [3]"): (
        30,
        "recordings.0",
        "= 3 must be a group of 'key: value' lines",
        None,
    ),
    ("[cells/basket.swc]", "[cells/basket.swc, 3]"): (
        23,
        "cell_types.basket.morphologies.1",
        "= 3 must be text",
        None,
    ),
    # Numbers out of range.
    ("200.5", "-200.5"): (11, "layers.1.thickness_um", "= -200.5 must be > 0", None),
    ("200.5", "0"): (11, "layers.1.thickness_um", "= 0 must be > 0", None),
    ("200.5", ".nan"): (11, "layers.1.thickness_um", "a finite number", None),
    ("200.5", ".inf"): (11, "layers.1.thickness_um", "a finite number", None),
    ("5e4", "-1"): (
        15,
        "cell_types.stellate.density_per_mm3.upper",
        "= -1 must be >= 0",
        None,
    ),
    ("5e4", "1e999"): (
        15,
        "cell_types.stellate.density_per_mm3.upper",
        "a finite number",
        None,
    ),
    ("lower: 7", "lower: -7"): (
        22,
        "cell_types.basket.count.lower",
        "= -7 must be >= 0",
        None,
    ),
    ("0.25", "51"): (29, "appositions.max_gap_um", "= 51 must be <= 50", None),
    ("250", "0"): (31, "conduction.axon_um_per_ms", "= 0 must be > 0", None),
    # Names.
    ("sign: inhibitory", "sign: inhibitry"): (
        19,
        "cell_types.basket.sign",
        "must be one of excitatory, inhibitory",
        "inhibitory",
    ),
    ("[basal, apical]", "[basal, apicle]"): (
        17,
        "cell_types.stellate.targets.1",
        "must be one of soma, axon_initial_segment, basal, apical",
        "apical",
    ),
    ("[basal, apical]", "[basal, basal]"): (
        13,
        "cell_types.stellate",
        "targets must name each target once",
        None,
    ),
    ("[basal, apical]", "[]"): (
        13,
        "cell_types.stellate",
        "targets must name each target once, and at least one",
        None,
    ),
    ("upright: -z", "upright: w"): (
        24,
        "cell_types.basket.upright",
        "must be one of x, y, z, -x, -y, -z",
        None,
    ),
    ("{upper: 5e4}", "{uper: 5e4}"): (
        15,
        "cell_types.stellate.density_per_mm3.uper",
        "is no layer",
        "upper",
    ),
    ("lower: 7", "lowest: 7"): (
        22,
        "cell_types.basket.count.lowest",
        "is no layer",
        "lower",
    ),
    ("[stellate, basket]", "[stellate, baskett]"): (
        28,
        "groups.all_cells.1",
        "= 'baskett' is no cell type",
        "basket",
    ),
    ("[stellate, basket]", "[stellate, stellate]"): (
        28,
        "groups.all_cells.1",
        "= 'stellate' is named twice",
        None,
    ),
    ("[stellate, basket]", "[]"): (28, "groups.all_cells", "names no cell type", None),
    ("groups:\n", "groups:\n  basket: [stellate]\n"): (
        28,
        "groups.basket",
        "is also the name of a cell type",
        None,
    ),
    # Files.
    ("cells/stellate_*.swc", "cells/stelate_*.swc"): (
        16,
        "cell_types.stellate.morphologies",
        "= 'cells/stelate_*.swc' finds no file",
        "cells/stellate_2.swc",
    ),
    ("[cells/basket.swc]", "[cells/basket.swc, cells/baskets.swc]"): (
        23,
        "cell_types.basket.morphologies",
        "= 'cells/baskets.swc' finds no file",
        "cells/basket.swc",
    ),
    ("[cells/basket.swc]", "[]"): (
        23,
        "cell_types.basket.morphologies",
        "names no file",
        None,
    ),
    ("[cells/basket.swc]", "''"): (
        23,
        "cell_types.basket.morphologies",
        "finds no file",
        None,
    ),
    ("[cells/basket.swc]", "cells"): (
        23,
        "cell_types.basket.morphologies",
        "= 'cells' finds no file",
        None,
    ),
    ("recordings: recordings.csv", "recordings: recording.csv"): (
        30,
        "recordings",
        "= 'recording.csv' is no file",
        "recordings.csv",
    ),
    ("recordings: recordings.csv", "recordings: cells"): (
        30,
        "recordings",
        "= 'cells' is no file",
        None,
    ),
    # Rules between fields.
    ("    density_per_mm3: {upper: 5e4}\n", ""): (
        13,
        "cell_types.stellate",
        "needs density_per_mm3 or count, one of the two",
        None,
    ),
    ("{upper: 5e4}\n", "{upper: 5e4}\n    count: {upper: 3}\n"): (
        13,
        "cell_types.stellate",
        "needs density_per_mm3 or count, one of the two",
        None,
    ),
    (
        "shape: box\n  width_um: 100\n  length_um: 80\n",
        "shape: hexagon\n  across_flats_um: 90\n",
    ): (
        3,
        "column",
        "edges: wrap needs shape: box",
        None,
    ),
    ("  length_um: 80\n", ""): (3, "column", "of shape box needs length_um", None),
    ("length_um: 80", "length_um: 80\n  diameter_um: 9"): (
        3,
        "column",
        "of shape box has no diameter_um",
        None,
    ),
    ("width_um: 100\n  length_um: 80", "file: recordings.csv"): (
        3,
        "column",
        "of shape box needs width_um",
        None,
    ),
    # The file itself.
    ("sign: inhibitory", "sign: !!python/name:os.system ''"): (
        19,
        "cell_types.basket.sign",
        "plain values only",
        None,
    ),
    ("  width_um: 100", "\twidth_um: 100"): (5, "", "is not valid YAML", None),
}


@pytest.mark.parametrize("change", MISTAKES, ids=lambda c: ascii(c[1])[:40])
def test_one_mistake_gives_one_problem_with_its_place(folder, change):
    line, field, words, nearest = MISTAKES[change]
    path = changed(folder, *change)
    (problem,) = problems_of(path)
    assert (problem.file, problem.line, problem.field) == (str(path), line, field)
    assert words in problem.rule
    assert problem.nearest == nearest
