"""Errors that a person can act on, and the problems that they collect."""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass

PROBLEMS_SHOWN = 10


class CircuitgenError(Exception):
    """Something the user can mend; read the message, no traceback is needed."""


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong in an input.

    Attributes
    ----------
    file : str
        The file as the user named it.
    line : int or None
        Line in that file, counted from 1; None when no line applies.
    field : str
        Dotted name of the field, ``cell_types.L4_stellate.sign``; may be empty.
    rule : str
        What must hold, and the value that does not: ``= -2 must be > 0``.
    nearest : str or None
        The nearest valid name, when the value is a misspelt name.
    """

    file: str
    line: int | None
    field: str
    rule: str
    nearest: str | None = None

    def __str__(self) -> str:
        """Format as ``file:line: field rule (did you mean 'nearest'?)``."""
        place = self.file if self.line is None else f"{self.file}:{self.line}"
        body = " ".join(part for part in (self.field, self.rule) if part)
        hint = f" (did you mean '{self.nearest}'?)" if self.nearest else ""
        return f"{place}: {body}{hint}"


class InputError(CircuitgenError):
    """Inputs are wrong: mend every listed problem, then run the command again."""

    def __init__(self, problems: Iterable[Problem]):
        self.problems = tuple(problems)
        shown = [str(problem) for problem in self.problems[:PROBLEMS_SHOWN]]
        hidden = len(self.problems) - len(shown)
        if hidden:
            shown.append(f"… and {hidden} more")
        super().__init__("\n".join(shown))


class RunFolderError(CircuitgenError):
    """A run folder is absent, unfinished or in use: the message says what to do."""


def nearest_name(value: object, names: Iterable[str]) -> str | None:
    """Return the valid name that looks most like `value`, or None."""
    close = difflib.get_close_matches(str(value), list(names), n=1, cutoff=0.6)
    return close[0] if close else None
