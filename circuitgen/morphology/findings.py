"""What a reader of reconstructions mended or noticed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Finding:
    """A repair that was made to a reconstruction, or a thing to look at.

    Attributes
    ----------
    severity : {"repair", "warning"}
        A repair changes nothing that a modeller would want otherwise; a warning may.
    code : str
        One word for the rule, the same for every file.
    text : str
        What was found, how much of it, and what it means for connectivity.
    count : int
        How many samples or pieces it concerns.
    line : int or None
        The first line of the file that it concerns; None for the whole file.
    """

    severity: str
    code: str
    text: str
    count: int
    line: int | None


def count_of(number: int, thing: str) -> str:
    """Write a number with what is counted, ``1 sample`` or ``3 samples``."""
    return f"{number} {thing}" if number == 1 else f"{number} {thing}s"


class Findings:
    """Collects findings while a file passes from rule to rule."""

    def __init__(self):
        self.found: list[Finding] = []

    def repair(self, code: str, text: str, lines: np.ndarray) -> None:
        """Note a repair of the samples on `lines`; nothing when there are none.

        ``{n}`` in `text` stands for the number of samples, with the word.
        """
        self._note("repair", code, text, lines)

    def warn(self, code: str, text: str, lines: np.ndarray | None = None) -> None:
        """Note something to look at, on some lines or in the whole file."""
        if lines is None:
            self.found.append(Finding("warning", code, text, 1, None))
        else:
            self._note("warning", code, text, lines)

    def _note(self, severity: str, code: str, text: str, lines: np.ndarray) -> None:
        number = len(lines)
        if number:
            text = text.replace("{n}", count_of(number, "sample"))
            finding = Finding(severity, code, text, number, int(np.min(lines)))
            self.found.append(finding)
