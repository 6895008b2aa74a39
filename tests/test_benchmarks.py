"""Benchmarks run at a small size, so that they cannot rot."""

from __future__ import annotations

import json
import subprocess
import sys

from builders_run import ROOT


def test_search_benchmark_runs():
    script = ROOT / "tests" / "benchmarks" / "appositions.py"
    words = ["--cells", "300", "--sample", "4", "--runs", "1", "--json"]
    done = subprocess.run(
        [sys.executable, script, *words], cwd=ROOT, capture_output=True, text=True
    )
    assert done.returncode == 0, done.stderr
    figures = json.loads(done.stdout)
    assert figures["appositions"] > 1000
    assert figures["appositions_per_s"] > 0
