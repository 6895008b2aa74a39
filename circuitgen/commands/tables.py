"""Rows of a command's table as a CSV file."""

from __future__ import annotations

import csv
from pathlib import Path

from circuitgen.core.errors import InputError, Problem
from circuitgen.core.files import whole_file


def _flat(row: dict) -> dict:
    """Spread nested summaries over columns of their own."""
    out = {}
    for name, value in row.items():
        if isinstance(value, dict):
            out |= {f"{name}_{end}": inner for end, inner in value.items()}
        else:
            out[name] = value
    return out


def write_rows(path: Path, rows: list[dict]) -> None:
    """Write rows with the same keys; InputError when the file cannot be written."""
    flat = [_flat(row) for row in rows]
    try:
        with whole_file(path) as partial, partial.open("w", newline="") as out:
            writer = csv.DictWriter(out, list(flat[0]) if flat else [])
            writer.writeheader()
            writer.writerows(flat)
    except OSError as error:
        rule = f"cannot be written: {error.strerror}"
        raise InputError([Problem(str(path), None, "--csv", rule)]) from None
