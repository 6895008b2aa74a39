"""Problems of the spec that only show when cells are placed."""

from __future__ import annotations

from circuitgen.core.errors import InputError, Problem
from circuitgen.spec import Spec, read_document


def spec_problem(spec: Spec, location: tuple[str | int, ...], rule: str) -> Problem:
    """Return a problem at a field of the spec file, with its line."""
    try:
        return read_document(spec.path).problem(location, rule)
    except InputError:
        # The file changed or went since it was loaded: name it without a line.
        parts = (part + 1 if isinstance(part, int) else part for part in location)
        return Problem(str(spec.path), None, ".".join(map(str, parts)), rule)
