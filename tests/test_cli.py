"""Commands as a user types them: exit codes, messages, what goes where."""

from __future__ import annotations

import json
import subprocess
import sys
import time

import pytest
from builders_run import ROOT, run_command, write_spec


def test_help_is_quick_and_light():
    probe = (
        "import sys, circuitgen.cli as c\n"
        "try: c.main(['--help'])\n"
        "except SystemExit: pass\n"
        "heavy = {'numpy', 'numba', 'scipy', 'pandas', 'pyarrow', 'pydantic', 'yaml'}\n"
        "sys.exit(len(heavy & set(sys.modules)))"
    )
    times = []
    for _ in range(3):
        begin = time.monotonic()
        done = subprocess.run(
            [sys.executable, "-c", probe], cwd=ROOT, capture_output=True, text=True
        )
        times.append(time.monotonic() - begin)
        assert done.returncode == 0
        assert "diagnosis" in done.stdout
    assert min(times) < 0.5


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("seed: 5", "seed: five"), "spec.yaml:2: seed = 'five'"),
        (("layers:", "layerz:"), "layers"),
        (("count: {L23: 60}", "count: {L23: 600000}"), "L23"),
        (("L4_stellate_*", "L4_stelate_*"), "did you mean"),
    ],
)
def test_wrong_specs_get_one_clear_message(tmp_path, change, message):
    spec = write_spec(tmp_path)
    spec.write_text(spec.read_text().replace(*change))
    code, out, err = run_command("build", spec, "--out", tmp_path / "run")
    assert code == 2
    assert message in err
    assert "Traceback" not in err
    assert out == ""
    assert not (tmp_path / "run").exists()


def test_debug_shows_the_traceback(tmp_path):
    absent = tmp_path / "absent.yaml"
    code, _, err = run_command("build", absent, "--out", tmp_path / "run")
    assert code == 2
    assert str(absent) in err
    assert "Traceback" not in err
    _, _, err = run_command("--debug", "build", absent, "--out", tmp_path / "run")
    assert "Traceback" in err


def test_every_unreadable_reconstruction_is_named(tmp_path):
    spec = write_spec(tmp_path)
    for name in ("one", "two"):
        (tmp_path / f"bad_{name}.swc").write_text("1 1 0 0 zero 5 -1\n")
    text = spec.read_text()
    wanted = [line for line in text.splitlines() if "L4_stellate" in line][0]
    spec.write_text(text.replace(wanted, "    morphologies: bad_*.swc"))
    code, _, err = run_command("build", spec, "--out", tmp_path / "run")
    assert code == 2
    assert "bad_one.swc:1" in err
    assert "bad_two.swc:1" in err


def test_repairs_are_reported(tmp_path):
    spec = write_spec(tmp_path)
    source = ROOT / "morphologies" / "L4_stellate_1.swc"
    lines = source.read_text().splitlines()
    words = lines[-1].split()
    words[5] = "0"
    (tmp_path / "mended.swc").write_text("\n".join([*lines[:-1], " ".join(words)]))
    text = spec.read_text()
    wanted = [line for line in text.splitlines() if "L4_stellate" in line][0]
    spec.write_text(text.replace(wanted, "    morphologies: mended.swc"))
    code, _, err = run_command("build", spec, "--out", tmp_path / "run")
    assert code == 0, err
    assert "1 repairs to reconstructions" in err
    stored = json.loads((tmp_path / "run" / "provenance.json").read_text())
    [repair] = stored["summary"]["repairs"]
    assert repair.startswith("mended.swc: radii of zero or less")


def test_json_alone_on_standard_output(tmp_path):
    spec = write_spec(tmp_path)
    code, out, err = run_command("build", spec, "--out", tmp_path / "run", "--json")
    assert code == 0
    summary = json.loads(out)
    assert summary["cells"] == 120
    assert summary["recordings_met"] == summary["recordings_with_counts"]
    assert "finding appositions" in err


def test_new_then_build_then_new_again(tmp_path):
    code, out, _ = run_command("new", tmp_path / "mine")
    assert code == 0
    assert "circuit.yaml" in out
    spec, run = tmp_path / "mine" / "circuit.yaml", tmp_path / "run"
    code, out, err = run_command("build", spec, "--out", run)
    assert code == 0, err
    assert "recordings met" in out
    code, _, err = run_command("new", tmp_path / "mine")
    assert code == 2
    assert "circuit.yaml" in err


def test_grow_writes_files_that_can_be_used(tmp_path):
    description = ROOT / "morphologies" / "growth" / "L4_stellate.yaml"
    code, out, _ = run_command("grow", description, "--out", tmp_path, "--count", 1)
    assert code == 0
    grown = tmp_path / "L4_stellate_1.swc"
    assert str(grown) in out
    shipped = (ROOT / "morphologies" / "L4_stellate_1.swc").read_text()
    assert grown.read_text() == shipped


@pytest.mark.parametrize("words", [("--threads", "0"), ("--threads", "two")])
def test_wrong_options(tmp_path, words):
    spec = write_spec(tmp_path)
    code, _, err = run_command("build", spec, "--out", tmp_path / "run", *words)
    assert code == 2
    assert "whole number" in err
