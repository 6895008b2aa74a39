"""The page of a run: numbers as in the tables, hostile names, one file, same bytes."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest
from builders_report import LONG, NAMES, QUOTES, SCRIPT, Page, hostile_run
from builders_run import RECORDINGS, ROOT, run_command, write_spec

from circuitgen.core.errors import CircuitgenError, RunFolderError
from circuitgen.report import write_report
from circuitgen.report.elements import number
from circuitgen.run import build

MOST_BYTES = 8_000_000


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return hostile_run(tmp_path_factory.mktemp("hostile"))


@pytest.fixture(scope="module")
def page(folder):
    return Page(folder / "report.html")


def test_build_writes_the_page_and_the_command_the_same_again(folder):
    before = (folder / "report.html").read_bytes()
    code, out, err = run_command("report", folder)
    assert code == 0, err
    assert out == f"report: {folder / 'report.html'}\n"
    assert (folder / "report.html").read_bytes() == before
    assert len(before) < MOST_BYTES


def test_the_page_stands_alone(page):
    for tag, attributes in page.tags:
        for key in ("src", "href", "srcset", "data", "action", "xlink:href"):
            value = attributes.get(key) or ""
            assert value.startswith(("#", "data:,")) or not value, (tag, value)
    style = page.raw.split("<style>")[1].split("</style>")[0]
    assert "url(" not in style
    assert "@import" not in style
    for word in ("fetch(", "XMLHttpRequest", "import(", "innerHTML", "eval("):
        assert word not in "".join(page.texts["script"])


def test_names_are_shown_and_not_run(page):
    scripts = [tag for tag, _ in page.tags if tag == "script"]
    assert len(scripts) == 2  # the data and the page's own
    assert not any(tag == "b" and "class" in attrs for tag, attrs in page.tags)
    for name in (SCRIPT, QUOTES, LONG):
        assert name in page.words
    assert "</script>a" in page.words  # a source of the recordings
    assert [kind["name"] for kind in page.data["types"]] == list(NAMES.values())


def test_counts_are_those_of_provenance_and_tables(folder, page):
    stored = json.loads((folder / "provenance.json").read_text())
    shown = re.findall(r'data-number="(\w+)">([\d,]+)<', page.raw)
    assert len(shown) == 7
    for key, text in shown:
        assert int(text.replace(",", "")) == stored["summary"][key]
    edges = pd.read_parquet(folder / "edges.parquet")
    assert dict(shown)["connections"] == f"{len(edges):,}"
    assert dict(shown)["synapses"] == f"{edges.synapses_n.sum():,}"
    for value in (stored["seed"], stored["spec_sha256"], stored["fingerprint"]):
        assert str(value) in page.words


@pytest.mark.parametrize("name", ["fit", "pathways"])
def test_rows_are_those_of_the_tables(folder, page, name):
    table = pd.read_csv(folder / f"{name}.csv")
    rows = page.data["recordings" if name == "fit" else "pathways"]
    assert len(rows) == len(table)
    for column in table:
        for shown, stored in zip([r[column] for r in rows], table[column], strict=True):
            if isinstance(stored, float) and np.isnan(stored):
                assert shown in (None, "")
            else:
                assert shown == stored


def test_every_recording_has_its_row_of_rounded_numbers(folder, page):
    table = pd.read_csv(folder / "fit.csv")
    body = page.raw.split('id="recordings-table"')[1].split("</tbody>")[0]
    rows = body.split("<tr data-row=")[1:]
    assert len(rows) == len(table)
    for text, row in zip(rows, table.itertuples(), strict=True):
        assert f"<b>{number(row.p_measured)}</b>" in text
        assert f"<b>{number(row.p_realised)}</b>" in text
        assert f"{row.connected_n} of {row.tested_n}" in text
        assert f"({number(row.p_measured_low)}–{number(row.p_measured_high)})" in text


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (None, "–"),
        (0.0, "0"),
        (0.12345, "0.123"),
        (0.000123456, "0.000123"),
        (12.0, "12"),
        (1234.5, "1,230"),
        (2435160, "2,435,160"),
    ],
)
def test_numbers_have_three_digits_and_no_exponent(value, text):
    assert number(value) == text


def test_lost_or_changed_reconstructions_leave_their_figures_out(folder, tmp_path):
    moved = tmp_path / "run"
    shutil.copytree(folder, moved)
    stored = json.loads((moved / "provenance.json").read_text())
    inputs = stored["inputs_sha256"]
    gone = {path.replace("/morphologies/", "/lost/"): inputs[path] for path in inputs}
    (moved / "provenance.json").write_text(json.dumps(stored | {"inputs_sha256": gone}))
    assert write_report(moved) == [moved / "report.html"]
    lost = Page(moved / "report.html").data
    assert lost["shown_cells"] == lost["shown_pairs"] == []
    changed = dict.fromkeys(inputs, "0" * 64)
    text = json.dumps(stored | {"inputs_sha256": changed})
    (moved / "provenance.json").write_text(text)
    write_report(moved)
    assert Page(moved / "report.html").data["shown_cells"] == []


def test_a_circuit_without_a_connection_has_its_page(tmp_path):
    rows = RECORDINGS.splitlines()
    recordings = f"{rows[0]}\na,pyramid,pyramid,120,0,0,100,soma,,,,fit\n"
    spec = write_spec(tmp_path, recordings=recordings)
    text = spec.read_text()
    for many, few in (("{L23: 60}", "{L23: 3}"), ("{L23: 12, L4: 8}", "{L23: 1}")):
        assert many in text
        text = text.replace(many, few)
    spec.write_text(text.replace("{L4: 40}", "{L4: 1}"))
    run = build(spec, tmp_path / "run").folder
    assert len(pd.read_parquet(run / "edges.parquet")) == 0
    page = Page(run / "report.html")
    assert page.data["shown_pairs"] == page.data["reciprocity"] == []
    assert page.data["recordings"][0]["verdict"] == "agrees"
    assert 'data-number="connections">0<' in page.raw


def test_a_folder_without_a_finished_run_is_refused(folder, tmp_path):
    code, out, err = run_command("report", tmp_path / "absent")
    assert code == 2
    assert "holds no finished run" in err
    assert "Traceback" not in err
    assert out == ""
    run = tmp_path / "run"
    shutil.copytree(folder, run)
    (run / "fit.csv").unlink()
    with pytest.raises(RunFolderError, match="lacks fit.csv"):
        write_report(run)


def test_figures_are_written_in_two_kinds_with_the_same_bytes(
    folder, tmp_path, monkeypatch
):
    pytest.importorskip("matplotlib")
    monkeypatch.setattr("circuitgen.report.figures.PNG_DOTS_PER_INCH", 50)
    files = write_report(folder, tmp_path / "one")[1:]
    assert {path.suffix for path in files} == {".svg", ".png"}
    assert len(files) == 16
    again = write_report(folder, tmp_path / "two")[1:]
    for first, second in zip(files, again, strict=True):
        assert first.read_bytes() == second.read_bytes(), first.name
        assert first.stat().st_size > 4000


def test_the_page_needs_no_matplotlib(folder):
    probe = (
        "import sys\n"
        "sys.modules['matplotlib'] = None\n"
        "from circuitgen.report import write_report\n"
        "from circuitgen.core.errors import CircuitgenError\n"
        "from pathlib import Path\n"
        "write_report(Path(sys.argv[1]))\n"
        "sys.modules.pop('matplotlib')\n"
        "sys.exit(any(name.startswith('matplotlib') for name in sys.modules))"
    )
    command = [sys.executable, "-c", probe, str(folder)]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr


def test_figures_without_matplotlib_say_what_to_install(folder, tmp_path, monkeypatch):
    monkeypatch.setattr("circuitgen.report.write.find_spec", lambda name: None)
    with pytest.raises(CircuitgenError, match="circuitgen\\[figures\\]"):
        write_report(folder, tmp_path / "figures")
    assert not (tmp_path / "figures").exists()
