"""How many appositions a second the search finds on the benchmark's workload.

``python tests/benchmarks/appositions.py [--cells 1000] [--runs 5] [--json]``: all cells
are targets, a sample of them sends its axons out. The first run, which may compile, is
not counted; figures are medians over the others.
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import statistics
import sys
import time

import numpy as np
from workload import make_workload

from circuitgen.appositions import find_appositions, index_targets


def measure(cells_n: int, sample_n: int, runs: int, threads: int) -> dict[str, float]:
    """Index once, search `runs` times; return the figures."""
    scene, _, _ = make_workload(cells_n)
    begin = time.perf_counter()
    index = index_targets(scene, np.arange(cells_n))
    index_s = time.perf_counter() - begin
    sample = np.unique(np.linspace(0, cells_n - 1, sample_n).astype(int))
    seconds = []
    for run in range(runs + 1):
        begin = time.perf_counter()
        found = find_appositions(index, sample, threads)
        if run:
            seconds.append(time.perf_counter() - begin)
    median = statistics.median(seconds)
    return {
        "cells": cells_n,
        "searched_cells": sample.size,
        "appositions": found.gap_um.size,
        "appositions_per_s": found.gap_um.size / median,
        "seconds_per_1000_cells": median / sample.size * 1000,
        "index_s": index_s,
        "runs": runs,
        "threads": threads,
        "cores": os.cpu_count(),
        "peak_rss_gib": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20,
    }


def main() -> None:
    """Print the figures, one a line or as JSON."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--cells", type=int, default=1000)
    parser.add_argument("--sample", type=int, default=200)
    parser.add_argument("--runs", type=int, default=5)
    parser.add_argument("--threads", type=int, default=os.cpu_count())
    parser.add_argument("--json", action="store_true")
    words = parser.parse_args()
    figures = measure(words.cells, words.sample, words.runs, words.threads)
    if words.json:
        sys.stdout.write(json.dumps(figures) + "\n")
        return
    for name, value in figures.items():
        sys.stdout.write(f"{name:<24}{value:>14,.4g}\n")


if __name__ == "__main__":
    main()
