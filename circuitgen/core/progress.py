"""Progress with the time left: a bar on a terminal, plain lines elsewhere."""

from __future__ import annotations

import shutil
import sys
import textwrap
import time
from types import TracebackType

PLAIN_LINE_EVERY_S = 5.0
LINE_WIDTH = 80


def wrapped(text: str) -> str:
    """Break a message at blanks into lines of 80 columns, the later ones indented.

    Words longer than a line, such as paths, stay whole so that they can be copied.
    """
    return textwrap.fill(
        text,
        LINE_WIDTH - 1,
        subsequent_indent="  ",
        break_long_words=False,
        break_on_hyphens=False,
    )


def _clock(seconds: float) -> str:
    minutes, seconds = divmod(round(seconds), 60)
    return f"{minutes}:{seconds:02d}"


class Progress:
    """Show how far a long step has come, on standard error.

    Parameters
    ----------
    title : str
        What is being done, a few words.
    total : int
        Units of work; blocks, cells or rows.
    """

    def __init__(self, title: str, total: int):
        self.title, self.total = title, max(total, 1)
        self._done = self._resumed = 0
        self._begin = self._last_line = time.monotonic()
        self._terminal = sys.stderr.isatty()

    def __enter__(self) -> Progress:
        """Show the step at nothing done."""
        self._show(force=True)
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Close the line, with the time the step took."""
        spent = _clock(time.monotonic() - self._begin)
        end = "done in" if kind is None else "stopped after"
        self._write(f"{self.title}: {end} {spent}", last=True)

    def advance(self, units: int = 1, *, resumed: bool = False) -> None:
        """Count units as done; `resumed` ones were finished by an earlier run."""
        self._done += units
        self._resumed += units if resumed else 0
        self._show(force=False)

    def _time_left(self) -> str:
        fresh = self._done - self._resumed
        if not fresh:
            return ""
        spent = time.monotonic() - self._begin
        return f", {_clock(spent / fresh * (self.total - self._done))} left"

    def _show(self, *, force: bool) -> None:
        now = time.monotonic()
        pause = 0.2 if self._terminal else PLAIN_LINE_EVERY_S
        if not force and now - self._last_line < pause:
            return
        self._last_line = now
        share = self._done / self.total
        text = f"{self.title}: {share:4.0%}{self._time_left()}"
        if self._terminal:
            filled = round(24 * share)
            text = f"[{'=' * filled}{' ' * (24 - filled)}] {text}"
        self._write(text, last=False)

    def _write(self, text: str, *, last: bool) -> None:
        if self._terminal:
            room = shutil.get_terminal_size((LINE_WIDTH, 24)).columns - 1
            sys.stderr.write(f"\r\x1b[2K{text[:room]}" + ("\n" if last else ""))
        else:
            sys.stderr.write(f"{text}\n")
        sys.stderr.flush()
