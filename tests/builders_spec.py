"""A valid spec with files beside it, and ways to spoil it; all numbers invented."""

from __future__ import annotations

from pathlib import Path

import pytest

from circuitgen.core.errors import InputError, Problem
from circuitgen.spec import Spec, load_spec

SPEC = """\
name: harbour-patch
seed: 7
column:
  shape: cylinder
  diameter_um: 300
  edges: open
layers:
  - {name: L1, thickness_um: 120}
  - name: L23
    thickness_um: 300
cell_types:
  L23_pyramidal:
    sign: excitatory
    density_per_mm3: {L23: 60000}
    morphologies: arbors/L23_pyramidal_*.swc
    upright: y
    soma_radius_um: 7
    targets: [soma, basal, apical]
  L23_basket:
    sign: inhibitory
    count:
      L1: 5
      L23: 40
    morphologies: [arbors/L23_basket_1.swc, "arbors/L23_basket_[23].swc"]
    ais_um: 30
groups:
  L23_all: [L23_pyramidal, L23_basket]
appositions: {max_gap_um: 0.5, min_spacing_um: 4.0}
recordings: recordings.csv
conduction: {axon_um_per_ms: 300, synaptic_delay_ms: 0.5}
"""

RECORDINGS = """\
source,pre_type,post_type,tested_n,connected_n,distance_low_um,distance_high_um,use
invented,L23_pyramidal,L23_all,50,4,0,100,fit
invented,L23_basket,L23_pyramidal,30,9,,,audit
"""

ARBORS = (
    "L23_pyramidal_2.swc",
    "L23_pyramidal_1.swc",
    "L23_basket_1.swc",
    "L23_basket_2.swc",
    "._L23_pyramidal_1.swc",
)


def write_spec(
    folder: Path, text: str | bytes = SPEC, recordings: str | bytes = RECORDINGS
) -> Path:
    """Write a spec, its recordings and empty reconstructions; return the spec's path."""
    (folder / "arbors").mkdir(parents=True, exist_ok=True)
    for name in ARBORS:
        (folder / "arbors" / name).touch()
    for name, content in (("spec.yaml", text), ("recordings.csv", recordings)):
        is_text = isinstance(content, str)
        (folder / name).write_bytes(content.encode() if is_text else content)
    return folder / "spec.yaml"


def load(folder: Path, *arguments, **keywords) -> Spec:
    """Write a spec and load it."""
    return load_spec(write_spec(folder, *arguments, **keywords))


def problems(folder: Path, *arguments, **keywords) -> list[Problem]:
    """Write a spec that is wrong and return what is reported."""
    with pytest.raises(InputError) as caught:
        load(folder, *arguments, **keywords)
    return list(caught.value.problems)


def edited(text: str, old: str, new: str) -> str:
    """Replace a passage that must occur exactly once."""
    assert text.count(old) == 1, f"{old!r} occurs {text.count(old)} times"
    return text.replace(old, new)


def line_of(text: str, passage: str) -> int:
    """Return the line, counted from 1, where a passage begins that occurs once."""
    assert text.count(passage) == 1, f"{passage!r} occurs {text.count(passage)} times"
    return text[: text.index(passage)].count("\n") + 1
