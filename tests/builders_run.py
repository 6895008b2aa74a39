"""A small circuit of stand-ins that builds in seconds; all numbers invented."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

from circuitgen.run import build

ROOT = Path(__file__).parent.parent
SPEC = """\
name: test-patch
seed: 5
column: {column}
layers:
  - {{name: L23, thickness_um: 330}}
  - {{name: L4, thickness_um: 240}}
cell_types:
  pyramid:
    sign: excitatory
    count: {{L23: 60}}
    morphologies: {morphologies}/L23_pyramidal_*.swc
    targets: [basal, apical, axon_initial_segment]
  basket:
    sign: inhibitory
    count: {{L23: 12, L4: 8}}
    morphologies: {morphologies}/L23_basket_1.swc
  stellate:
    sign: excitatory
    count: {{L4: 40}}
    morphologies: {morphologies}/L4_stellate_*.swc
groups:
  excitatory: [pyramid, stellate]
appositions: {{max_gap_um: 1.0, min_spacing_um: 4.0}}
recordings: recordings.csv
conduction: {{axon_um_per_ms: 250, synaptic_delay_ms: 0.75}}
"""
RECORDINGS = """\
source,pre_type,post_type,tested_n,connected_n,distance_low_um,distance_high_um,distance_kind,synapses_mean,synapses_sd,synapses_pairs_n,use
a,pyramid,pyramid,120,14,0,100,soma,2.6,1.0,9,fit
b,basket,pyramid,40,18,0,120,lateral,4.0,1.6,8,fit
c,excitatory,basket,40,14,20,150,soma,2.0,0.8,6,fit
d,stellate,pyramid,60,9,0,,soma,,,,fit
e,stellate,stellate,50,7,0,100,soma,2.4,0.9,7,fit
f,basket,stellate,30,20,0,100,soma,,,,audit
"""
OPEN = "{shape: cylinder, diameter_um: 140}"
WRAP = "{shape: box, width_um: 160, length_um: 130, edges: wrap}"


def write_spec(folder: Path, column: str = OPEN, recordings: str = RECORDINGS) -> Path:
    """Write the spec and its recordings; return the spec's path."""
    folder.mkdir(parents=True, exist_ok=True)
    spec = folder / "spec.yaml"
    spec.write_text(SPEC.format(column=column, morphologies=ROOT / "morphologies"))
    (folder / "recordings.csv").write_text(recordings)
    return spec


def build_small(folder: Path, column: str = OPEN, **options) -> Path:
    """Build the small circuit; return the run folder."""
    return build(write_spec(folder, column), folder / "run", **options).folder


def start_command(*words: object, **variables: str) -> subprocess.Popen:
    """Start the command line as a user would, in a process of its own.

    `variables` are added to the environment.
    """
    return subprocess.Popen(
        [sys.executable, "-m", "circuitgen.cli", *map(str, words)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env={**os.environ, "PYTHONPATH": str(ROOT), **variables},
    )


def run_command(*words: object) -> tuple[int, str, str]:
    """Run the command line; return exit code, standard output, standard error."""
    process = start_command(*words)
    out, err = process.communicate(timeout=300)
    return process.returncode, out, err
