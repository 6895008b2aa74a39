"""A small spec to begin with, copied into a folder of the user's."""

from __future__ import annotations

from importlib import resources
from pathlib import Path

from circuitgen.core.errors import InputError, Problem
from circuitgen.core.files import whole_file


def write_starter(folder: Path) -> list[Path]:
    """Write the starter spec, its recordings and its reconstructions into a folder.

    Nothing is overwritten: an InputError names the files that are in the way.
    """
    folder = Path(folder)
    source = resources.files("circuitgen.spec") / "starter"
    entries = sorted(source.iterdir(), key=lambda entry: entry.name)
    targets = [folder / entry.name for entry in entries]
    if folder.exists() and not folder.is_dir():
        raise InputError([Problem(str(folder), None, "", "is a file, not a folder")])
    problems = [
        Problem(str(target), None, "", "is there already; nothing was written")
        for target in targets
        if target.exists()
    ]
    if problems:
        raise InputError(problems)
    for entry, target in zip(entries, targets, strict=True):
        with whole_file(target) as partial:
            partial.write_bytes(entry.read_bytes())
    return targets
