"""A large spec loads within a second."""

from __future__ import annotations

import time

import pytest

from circuitgen.core.errors import InputError
from circuitgen.spec import load_spec

TYPES_N = 50
HEADER = (
    "source,pre_type,post_type,tested_n,connected_n,distance_low_um,distance_high_um,"
    "distance_kind,slice_thickness_um,soma_depth_low_um,soma_depth_high_um,"
    "synapses_mean,synapses_sd,synapses_pairs_n,reciprocal_tested_n,"
    "reciprocal_connected_n,use\n"
)


def write_large_spec(folder, known: str):
    """Write 50 types, of which the recordings know `known`, and 2,500 full rows."""
    names = [f"type_{number}" for number in range(TYPES_N)]
    lines = ["name: large", "seed: 1", "column: {shape: cylinder, diameter_um: 300}"]
    lines += ["layers:"]
    lines += [f"  - {{name: L{number}, thickness_um: 200}}" for number in range(6)]
    lines += ["cell_types:"]
    for name in names:
        (folder / f"{name}_1.swc").touch()
        lines += [
            f"  {name}:",
            "    sign: excitatory",
            "    density_per_mm3: {L0: 1e3, L1: 1e3, L2: 1e3, L3: 1e3, L4: 1e3}",
            f"    morphologies: {name}_*.swc",
        ]
    lines += ["recordings: table.csv", ""]
    rows = [
        f"x,{known}{pre},{known}{post},50,5,0,100,soma,300,40,90,2.5,1,10,20,2,fit\n"
        for pre in range(TYPES_N)
        for post in range(TYPES_N)
    ]
    (folder / "large.yaml").write_text("\n".join(lines))
    (folder / "table.csv").write_text(HEADER + "".join(rows))
    return folder / "large.yaml"


def fastest(action, times: int = 3) -> float:
    """Return the least time in seconds: other work on the machine only adds to it."""
    seconds = []
    for _ in range(times):
        begin = time.perf_counter()
        action()
        seconds.append(time.perf_counter() - begin)
    return min(seconds)


def test_2500_recordings_and_50_types(tmp_path):
    path = write_large_spec(tmp_path, "type_")
    assert len(load_spec(path).recordings) == 2500
    assert fastest(lambda: load_spec(path)) < 1.0


def test_every_name_wrong(tmp_path):
    path = write_large_spec(tmp_path, "typo_")

    def load():
        with pytest.raises(InputError) as caught:
            load_spec(path)
        assert len(caught.value.problems) == 5000

    assert fastest(load) < 1.0
