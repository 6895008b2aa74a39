"""Where a run comes from: versions, inputs, what it cost, and hashes of its tables."""

from __future__ import annotations

import hashlib
import json
import os
import platform
import resource
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from importlib.metadata import version
from pathlib import Path

from circuitgen import __version__
from circuitgen.core.files import sha256_of, whole_file
from circuitgen.spec import Spec

_LIBRARIES = ("numba", "numpy", "pyarrow", "pydantic", "PyYAML", "scipy", "trimesh")


def hash_inputs(spec: Spec) -> dict[str, str]:
    """Return the SHA-256 of every file that the spec names."""
    return {str(path): sha256_of(path) for path in spec.input_files}


def fingerprint(spec: Spec, inputs: dict[str, str], draw: int | None) -> str:
    """Return a hash of all that a run depends on: spec, inputs, draw, versions."""
    digest = hashlib.sha256(spec.text.encode())
    digest.update(f"draw {draw}".encode())
    digest.update(__version__.encode())
    for library in _LIBRARIES:
        digest.update(version(library).encode())
    for name, value in sorted(inputs.items(), key=lambda item: Path(item[0]).name):
        digest.update(Path(name).name.encode() + value.encode())
    return digest.hexdigest()


class Stopwatch:
    """Seconds spent in every stage of this process."""

    def __init__(self):
        self.seconds: dict[str, float] = {}

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        """Time one stage."""
        begin = time.monotonic()
        yield
        self.seconds[name] = round(time.monotonic() - begin, 3)


def peak_memory_gib() -> float:
    """Return the largest resident memory of this process so far."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak * (1 if sys.platform == "darwin" else 1024) / 2**30


def write_provenance(
    path: Path,
    spec: Spec,
    inputs: dict[str, str],
    stopwatch: Stopwatch,
    summary: dict,
    mark: str,
) -> None:
    """Write provenance.json beside the tables that it hashes."""
    tables = sorted(
        entry
        for entry in path.parent.iterdir()
        if entry.suffix in (".parquet", ".csv") and not entry.name.startswith(".")
    )
    with stopwatch.stage("hash"):
        hashes = {entry.name: sha256_of(entry) for entry in tables}
    content = {
        "circuitgen": __version__,
        "fingerprint": mark,
        "spec_name": spec.name,
        "spec_path": str(spec.path),
        "seed": spec.seed,
        "spec_sha256": hashlib.sha256(spec.text.encode()).hexdigest(),
        "spec_text": spec.text,
        "inputs_sha256": inputs,
        "tables_sha256": hashes,
        "summary": summary,
        "libraries": {name: version(name) for name in _LIBRARIES},
        "python": platform.python_version(),
        "platform": platform.platform(),
        "cores": os.cpu_count(),
        "seconds": stopwatch.seconds,
        "peak_memory_gib": round(peak_memory_gib(), 3),
        "finished": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime()),
        "caution": "Research use only. A predicted connection is a hypothesis, never"
        " grounds for diagnosis or treatment.",
    }
    with whole_file(path) as partial:
        partial.write_text(json.dumps(content, indent=1) + "\n", encoding="utf-8")
