"""A small spec to begin with, copied into a folder of the user's."""

from __future__ import annotations

import os
from importlib import resources
from pathlib import Path

from circuitgen.core.errors import InputError, Problem
from circuitgen.core.files import whole_file


def write_starter(folder: Path) -> list[Path]:
    """Write the starter spec, its recordings and its reconstructions into a folder.

    Returns the files written, sorted. Nothing is overwritten: an InputError names
    every file that is in the way, and then nothing is written.
    """
    folder = Path(folder)
    source = resources.files("circuitgen.spec") / "starter"
    contents = {folder / entry.name: entry.read_bytes() for entry in source.iterdir()}
    taken = [path for path in sorted(contents) if os.path.lexists(path)]
    if taken:
        rule = "is there already; nothing was written"
        raise InputError([Problem(str(path), None, "", rule) for path in taken])
    written: list[Path] = []
    try:
        for path in sorted(contents):
            with whole_file(path) as partial:
                partial.write_bytes(contents[path])
            written.append(path)
    except OSError as error:
        for path in written:
            path.unlink(missing_ok=True)
        rule = f"cannot be written: {error.strerror}; nothing was written"
        raise InputError([Problem(str(folder), None, "", rule)]) from None
    return written
