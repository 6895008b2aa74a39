"""What a build prints: 80 columns, no colour, the same on a terminal and in a log."""

from __future__ import annotations

import os
import pty
import re
import subprocess
import sys

import pytest
from builders_report import LONG, hostile_spec
from builders_run import ROOT

from circuitgen.core.progress import wrapped


@pytest.fixture
def spec(tmp_path):
    return hostile_spec(tmp_path)


def build_command(spec):
    words = ["-m", "circuitgen.cli", "build", spec.name, "--out", "run"]
    return [sys.executable, *words]


def environment(**more):
    return {**os.environ, "PYTHONPATH": str(ROOT), **more}


def test_a_log_has_plain_lines_of_80_columns(spec):
    done = subprocess.run(
        build_command(spec),
        cwd=spec.parent,
        env=environment(),
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
    lines = (done.stdout + done.stderr).splitlines()
    assert max(map(len, lines)) <= 80
    assert "\x1b" not in done.stdout + done.stderr
    assert "\r" not in done.stderr
    assert "too high for 1 connected of 30" in " ".join(done.stdout.split())
    assert done.stdout.endswith("run folder: run\nreport:     run/report.html\n")


def test_a_terminal_of_any_encoding_gets_lines_that_fit(spec):
    """A terminal that lacks most letters of the names: escapes, no traceback."""
    master, slave = pty.openpty()
    process = subprocess.Popen(
        build_command(spec),
        cwd=spec.parent,
        env=environment(PYTHONIOENCODING="latin-1", COLUMNS="80"),
        stdout=subprocess.PIPE,
        stderr=slave,
    )
    os.close(slave)
    seen = b""
    try:
        while data := os.read(master, 65536):
            seen += data
    except OSError:  # the other end of a terminal was closed
        pass
    out = process.communicate()[0].decode("latin-1")
    os.close(master)
    assert process.returncode == 0
    assert "\\u2192" in out
    shown = re.split(r"[\r\n]+", seen.decode("latin-1"))
    plain = [line.replace("\x1b[2K", "") for line in shown]
    assert not any("\x1b" in line for line in plain)
    assert any(line.startswith("[====") for line in plain)
    assert max(len(line) for line in plain if "warning" not in line) <= 80


def test_wrapped_messages_keep_paths_whole():
    path = "/a" * 60
    text = wrapped(f"the file {path} of {LONG} was not found anywhere at all")
    assert path in text
    others = [line for line in text.splitlines() if path not in line]
    assert max(map(len, others)) < 80
    assert " ".join(text.split()) == " ".join(
        f"the file {path} of {LONG} was not found anywhere at all".split()
    )
