"""The starter spec: loads as it stands, and never overwrites anything."""

from __future__ import annotations

import os

import pytest

from circuitgen.core.errors import InputError
from circuitgen.spec import load_spec, write_starter

MOST_BYTES = 1_000_000
MOST_CELLS = 600


def test_the_starter_loads_as_it_stands(tmp_path, monkeypatch):
    written = write_starter(tmp_path / "new" / "circuit")
    monkeypatch.chdir("/")
    assert written == sorted((tmp_path / "new" / "circuit").iterdir())
    assert sum(path.stat().st_size for path in written) < MOST_BYTES
    spec = load_spec(tmp_path / "new" / "circuit" / "circuit.yaml")
    assert set(spec.input_files) | {spec.path} == set(written)
    assert {cell_type.sign for cell_type in spec.cell_types} == {
        "excitatory",
        "inhibitory",
    }
    assert {recording.use for recording in spec.recordings} == {"fit", "audit"}
    assert all("invented" in recording.source for recording in spec.recordings)
    assert "INVENTED" in spec.text


def test_the_starter_is_small(tmp_path):
    write_starter(tmp_path)
    spec = load_spec(tmp_path / "circuit.yaml")
    area_um2 = 3.14159 / 4 * spec.column.diameter_um**2
    cells = sum(sum(cell_type.count.values()) for cell_type in spec.cell_types)
    for layer in spec.layers:
        volume_mm3 = area_um2 * layer.thickness_um * 1e-9
        for cell_type in spec.cell_types:
            cells += cell_type.density_per_mm3.get(layer.name, 0) * volume_mm3
    assert 100 < cells < MOST_CELLS


def test_every_arbor_says_that_it_is_grown(tmp_path):
    write_starter(tmp_path)
    arbors = sorted(tmp_path.glob("*.swc"))
    assert arbors
    for path in arbors:
        comments = [
            line for line in path.read_text().splitlines() if line.startswith("#")
        ]
        assert "synthetic" in "\n".join(comments).lower()


def test_nothing_is_overwritten(tmp_path):
    (tmp_path / "recordings.csv").write_text("mine")
    (tmp_path / "circuit.yaml").symlink_to(tmp_path / "nowhere")
    with pytest.raises(InputError) as caught:
        write_starter(tmp_path)
    assert [(one.file, one.rule) for one in caught.value.problems] == [
        (str(tmp_path / name), "is there already; nothing was written")
        for name in ("circuit.yaml", "recordings.csv")
    ]
    assert (tmp_path / "recordings.csv").read_text() == "mine"
    assert sorted(os.listdir(tmp_path)) == ["circuit.yaml", "recordings.csv"]


def test_other_files_are_left_alone(tmp_path):
    (tmp_path / "notes.txt").write_text("mine")
    written = write_starter(tmp_path)
    assert len(os.listdir(tmp_path)) == len(written) + 1
    assert (tmp_path / "notes.txt").read_text() == "mine"


def test_twice(tmp_path):
    written = write_starter(tmp_path)
    with pytest.raises(InputError) as caught:
        write_starter(tmp_path)
    assert len(caught.value.problems) == len(written)


def test_a_file_where_the_folder_should_be(tmp_path):
    (tmp_path / "file").touch()
    for folder in (tmp_path / "file", tmp_path / "file" / "below"):
        with pytest.raises(InputError) as caught:
            write_starter(folder)
        (problem,) = caught.value.problems
        assert problem.file == str(folder)
        assert "cannot be written" in problem.rule


def test_half_a_starter_is_taken_back(tmp_path, monkeypatch):
    """When the disk is full at the third file, none of the files stays."""
    replace = os.replace
    calls = []

    def full(source, target):
        calls.append(target)
        if len(calls) == 3:
            raise OSError(28, "No space left on device")
        replace(source, target)

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(InputError) as caught:
        write_starter(tmp_path)
    assert "No space left on device" in str(caught.value)
    assert os.listdir(tmp_path) == []
