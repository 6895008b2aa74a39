"""One edit of a good spec, one problem: the exact line and the exact words."""

from __future__ import annotations

import pytest
from builders_spec import RECORDINGS, SPEC, edited, problems

# Each case: the passage that is replaced, what replaces it, then the line and the words
# of the one problem that follows (HERE is the folder of the spec).
CASES = """\
name: harbour-patch
name: ' x'
1: name = ' x' must not be empty or begin or end with a blank

seed: 7
seed: -1
2: seed = -1 must be >= 0

seed: 7
seed: 18446744073709551616
2: seed = 18446744073709551616 must be <= 18446744073709551615

seed: 7
seed: 7.5
2: seed = 7.5 must be a whole number

seed: 7
sed: 7\\nseed: 7
2: sed is not a known key (did you mean 'seed'?)

{name: L1, thickness_um: 120}
{name: L1}
8: layers.1.thickness_um is missing

  - name: L23
  - {name: L1, thickness_um: 9}\\n  - name: L23
9: layers.2.name = 'L1' is given twice

thickness_um: 300
thickness_mm: 0.3\\n    thickness_um: 300
10: layers.2.thickness_mm is not a known key; the unit here is um (did you mean
    'thickness_um'?)

thickness_um: 300
thickness_um: 0
10: layers.2.thickness_um = 0 must be > 0

thickness_um: 300
thickness_um: 3e9
10: layers.2.thickness_um = 3000000000 must be <= 1e+06

sign: excitatory
sign: excitory
13: cell_types.L23_pyramidal.sign = 'excitory' must be one of excitatory, inhibitory
    (did you mean 'excitatory'?)

{L23: 60000}
{L23: -200}
14: cell_types.L23_pyramidal.density_per_mm3.L23 = -200 must be > 0

{L23: 60000}
{L23: no}
14: cell_types.L23_pyramidal.density_per_mm3.L23 = 'no' must be a number

{L23: 60000}
{L23: }
14: cell_types.L23_pyramidal.density_per_mm3.L23 = nothing must be a number

{L23: 60000}
{L3: 60000}
14: cell_types.L23_pyramidal.density_per_mm3.L3 is not a layer of the spec (did you
    mean 'L23'?)

{L23: 60000}
{L23: 1, L9: 1}
14: cell_types.L23_pyramidal.density_per_mm3.L9 is not a layer of the spec; there are
    'L1', 'L23'

{L23: 60000}
{}
14: cell_types.L23_pyramidal.density_per_mm3 must have at least 1 entry

{L23: 60000}
60000
14: cell_types.L23_pyramidal.density_per_mm3 = 60000 must be 'key: value' lines

    density_per_mm3: {L23: 60000}\\n
(nothing)
12: cell_types.L23_pyramidal must have density_per_mm3 or count

density_per_mm3: {L23: 60000}
density_per_mm3: {L23: 60000}\\n    count: {L23: 5}
15: cell_types.L23_pyramidal.count is given beside density_per_mm3; keep one of the
    two

density_per_mm3: {L23: 60000}
density_per_mm3: {L23: 60000}\\n    density_per_um3: {L23: 5}
15: cell_types.L23_pyramidal.density_per_um3 is not a known key; the unit here is
    per_mm3 (did you mean 'density_per_mm3'?)

L1: 5
L1: 5.5
22: cell_types.L23_basket.count.L1 = 5.5 must be a whole number

L1: 5
L1: 0
22: cell_types.L23_basket.count.L1 = 0 must be >= 1

upright: y
upright: up
16: cell_types.L23_pyramidal.upright = 'up' must be one of x, y, z, -x, -y, -z

soma_radius_um: 7
soma_radius_um: 0
17: cell_types.L23_pyramidal.soma_radius_um = 0 must be > 0

soma_radius_um: 7
soma_radius: 7
17: cell_types.L23_pyramidal.soma_radius is not a known key; the unit here is um (did
    you mean 'soma_radius_um'?)

[soma, basal, ap
[soma, soma, ap
18: cell_types.L23_pyramidal.targets names 'soma' twice

[soma, basal, ap
[soma, basel, ap
18: cell_types.L23_pyramidal.targets.2 = 'basel' must be one of soma,
    axon_initial_segment, basal, apical (did you mean 'basal'?)

[soma, basal, apical]
[]
18: cell_types.L23_pyramidal.targets must have at least 1 entry

[soma, basal, apical]
soma
18: cell_types.L23_pyramidal.targets = 'soma' must be a list

ais_um: 30
ais_um: -1
25: cell_types.L23_basket.ais_um = -1 must be >= 0

  L23_all:
  L23_basket:
27: groups.L23_basket is also the name of a cell type

  L23_all: [L23_pyramidal
  L23_all: [L23_pyramid
27: groups.L23_all.1 = 'L23_pyramid' is not a cell type of the spec (did you mean
    'L23_pyramidal'?)

  L23_all: [L23_pyramidal
  L23_all: [L23_basket
27: groups.L23_all.2 = 'L23_basket' is named twice

[L23_pyramidal, L23_basket]
[]
27: groups.L23_all must have at least 1 entry

max_gap_um: 0.5
max_gap_um: -0.1
28: appositions.max_gap_um = -0.1 must be >= 0

max_gap_um: 0.5
max_gap_nm: 500
28: appositions.max_gap_nm is not a known key; the unit here is um (did you mean
    'max_gap_um'?)

min_spacing_um: 4.0
min_spacing_um: 0
28: appositions.min_spacing_um = 0 must be >= 0.5

axon_um_per_ms: 300
axon_um_per_ms: 0
30: conduction.axon_um_per_ms = 0 must be > 0

delay_ms: 0.5
delay_ms: -1
30: conduction.synaptic_delay_ms = -1 must be >= 0

delay_ms: 0.5
delay_s: 1
30: conduction.synaptic_delay_s is not a known key; the unit here is ms (did you mean
    'synaptic_delay_ms'?)

recordings: rec
recordings: req
29: recordings = 'reqordings.csv' finds no file in the folder HERE (did you mean
    'recordings.csv'?)

recordings: recordings.csv
recordings: 3
29: recordings must be a file name or a list of rows of 'column: value'

recordings: recordings.csv
recordings: [x]
29: recordings must be a file name or a list of rows of 'column: value'

recordings: recordings.csv
recordings: arbors
29: recordings = 'arbors' finds no file in the folder HERE

recordings: recordings.csv
recording: recordings.csv
29: recording is not a known key (did you mean 'recordings'?)

arbors/L23_basket_1
arbors/L23_baskt_1
24: cell_types.L23_basket.morphologies.1 = 'arbors/L23_baskt_1.swc' finds no file in
    the folder HERE/arbors (did you mean 'arbors/L23_basket_1.swc'?)

arbors/L23_pyramidal_*
arbor/L23_pyramidal_*
15: cell_types.L23_pyramidal.morphologies = 'arbor/L23_pyramidal_*.swc' finds no file
    in the folder HERE/arbor, which does not exist
"""


@pytest.mark.parametrize("case", CASES.strip("\n").split("\n\n"))
def test_one_fault(tmp_path, case):
    old, new, *words = case.split("\n")
    old, new = (
        part.replace("\\n", "\n").replace("(nothing)", "") for part in (old, new)
    )
    expected = " ".join(word.strip() for word in words)
    recordings = RECORDINGS
    if "groups." in expected:
        # A recording that names a group would suffer from the same fault.
        recordings = edited(RECORDINGS, "L23_all", "L23_basket")
    found = problems(tmp_path, edited(SPEC, old, new), recordings)
    messages = [str(one).replace(f"{tmp_path}/spec.yaml:", "") for one in found]
    assert [one.replace(str(tmp_path), "HERE") for one in messages] == [expected]
