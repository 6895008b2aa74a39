"""Same spec and seed, same bytes: threads, blocks, kills and second runs."""

from __future__ import annotations

import json
import os
import signal
import time

import pandas as pd
import pytest
from builders_run import RECORDINGS, build_small, run_command, start_command, write_spec

from circuitgen.core.errors import RunFolderError
from circuitgen.run import build
from circuitgen.run import sites as sites_module


def hashes(folder):
    return json.loads((folder / "provenance.json").read_text())["tables_sha256"]


@pytest.fixture(scope="module")
def reference(tmp_path_factory):
    return hashes(build_small(tmp_path_factory.mktemp("reference"), threads=1))


@pytest.mark.parametrize("threads", [2, 3])
def test_threads_change_nothing(tmp_path, reference, threads):
    assert hashes(build_small(tmp_path, threads=threads)) == reference


@pytest.mark.parametrize("cores", [1, 2])
def test_cores_of_the_linear_algebra_change_nothing(tmp_path, reference, cores):
    process = start_command(
        "build", write_spec(tmp_path), "--out", tmp_path / "run",
        OPENBLAS_NUM_THREADS=str(cores), NUMBA_NUM_THREADS=str(cores),
    )  # fmt: skip
    _, err = process.communicate(timeout=300)
    assert process.returncode == 0, err
    assert hashes(tmp_path / "run") == reference


def test_blocks_change_no_row(tmp_path, monkeypatch):
    whole = build_small(tmp_path / "whole")
    monkeypatch.setattr(sites_module, "AXON_SEGMENTS_PER_BLOCK", 60_000)
    monkeypatch.setattr(sites_module, "MOST_TARGETS_IN_INDEX", 10_000)
    cut = build_small(tmp_path / "cut")
    assert len(list((cut / "pairs.parquet").iterdir())) > 4
    for name in ("pairs", "synapses", "edges"):
        first = pd.read_parquet(whole / f"{name}.parquet")
        pd.testing.assert_frame_equal(first, pd.read_parquet(cut / f"{name}.parquet"))


@pytest.mark.parametrize("delay_s", [0.2, 0.8, 1.4, 1.8, 2.2, 2.6])
def test_a_kill_at_any_moment_loses_nothing(tmp_path, reference, delay_s):
    spec, run = write_spec(tmp_path), tmp_path / "run"
    process = start_command("build", spec, "--out", run)
    time.sleep(delay_s)
    process.send_signal(signal.SIGKILL)
    process.communicate()
    if run.exists():
        assert hashes(run) == reference
    code, _, err = run_command("build", spec, "--out", run)
    assert code == 0, err
    assert hashes(run) == reference
    assert not (tmp_path / "run.unfinished").exists()


def test_another_seed_changes_the_tables(tmp_path, reference):
    spec = write_spec(tmp_path)
    spec.write_text(spec.read_text().replace("seed: 5", "seed: 6"))
    other = hashes(build(spec, tmp_path / "run").folder)
    assert all(other[name] != reference[name] for name in reference)


def test_a_finished_run_is_left_alone(tmp_path):
    folder = build_small(tmp_path)
    before = {path: path.stat().st_mtime_ns for path in folder.rglob("*")}
    outcome = build(tmp_path / "spec.yaml", folder)
    assert not outcome.built
    assert {path: path.stat().st_mtime_ns for path in folder.rglob("*")} == before
    spec = write_spec(tmp_path, recordings=RECORDINGS.replace("120,14", "120,15"))
    with pytest.raises(RunFolderError, match="--force"):
        build(spec, folder)
    assert {path: path.stat().st_mtime_ns for path in folder.rglob("*")} == before
    assert build(spec, folder, force=True).built
    assert not (tmp_path / "run.replaced").exists()


def test_a_folder_that_is_no_run_is_refused(tmp_path):
    (tmp_path / "run").mkdir()
    (tmp_path / "run" / "thesis.txt").write_text("years of work")
    with pytest.raises(RunFolderError, match="no run"):
        build(write_spec(tmp_path), tmp_path / "run")
    assert (tmp_path / "run" / "thesis.txt").read_text() == "years of work"


def test_without_a_usable_recording_the_prior_is_drawn_and_said(tmp_path):
    rows = RECORDINGS.splitlines()
    only_audit = "\n".join([rows[0], rows[-1]]) + "\n"
    outcome = build(write_spec(tmp_path, recordings=only_audit), tmp_path / "run")
    assert any("no recording enters" in text for text in outcome.summary["warnings"])
    pathways = pd.read_csv(outcome.folder / "pathways.csv")
    assert not pathways.recorded.any()
    # Hardly anything is known: most 90 % intervals span half of what touches.
    width = (pathways.p_connect_high - pathways.p_connect_low) / pathways.p_ceiling
    assert width.median() > 0.5


def test_a_posterior_draw_is_a_run_of_its_own(tmp_path, reference):
    spec = write_spec(tmp_path)
    third = build(spec, tmp_path / "third", draw=3).folder
    again = build(spec, tmp_path / "again", draw=3, threads=1).folder
    assert hashes(third) == hashes(again)
    other = hashes(third)
    same = {"cells.parquet", "windows.parquet", "curves.csv"}
    assert {name for name in other if other[name] == reference[name]} == same
    laws = pd.read_parquet(third / "laws.parquet").set_index("draw")
    assert (laws.loc[0].t0.to_numpy() == laws.loc[3].t0.to_numpy()).all()
    with pytest.raises(RunFolderError, match="another spec, input or version"):
        build(spec, third, draw=4)


def test_two_builds_at_once(tmp_path):
    spec, run = write_spec(tmp_path), tmp_path / "run"
    first = start_command("build", spec, "--out", run)
    while not (tmp_path / "run.unfinished" / "fingerprint.json").exists():
        assert first.poll() is None
        time.sleep(0.02)
    os.kill(first.pid, signal.SIGSTOP)  # or it may end before the second has begun
    code, _, err = run_command("build", spec, "--out", run)
    os.kill(first.pid, signal.SIGCONT)
    assert code == 2
    assert "another process is building" in err
    _, err = first.communicate(timeout=300)
    assert first.returncode == 0, err


def test_interrupt_answers_and_the_build_goes_on_later(tmp_path, reference):
    spec, run = write_spec(tmp_path), tmp_path / "run"
    process = start_command("build", spec, "--out", run)
    while not (tmp_path / "run.unfinished" / "cells.parquet").exists():
        assert process.poll() is None
        time.sleep(0.02)
    begin = time.monotonic()
    os.kill(process.pid, signal.SIGINT)
    _, err = process.communicate(timeout=60)
    assert time.monotonic() - begin < 2.0
    assert process.returncode == 130
    assert "continues from here" in err
    assert "Traceback" not in err
    assert hashes(build(spec, run).folder) == reference
