"""Writes the page and the figures of a finished run."""

from __future__ import annotations

from importlib.util import find_spec
from pathlib import Path

from circuitgen.core.errors import CircuitgenError
from circuitgen.core.files import whole_file
from circuitgen.report.content import gather
from circuitgen.report.page import page
from circuitgen.report.recordings import judged, troubles
from circuitgen.report.source import RunTables

REPORT = "report.html"


def write_report(run_folder: Path, figures: Path | None = None) -> list[Path]:
    """Write ``report.html`` into a run folder, from its tables alone.

    Parameters
    ----------
    run_folder : Path
        A finished run.
    figures : Path, optional
        A folder for each figure as SVG and PNG; needs matplotlib.

    Returns
    -------
    list of Path
        The files written, the page first.

    Raises
    ------
    RunFolderError
        Where the folder holds no finished run.
    CircuitgenError
        Where figures are wanted and matplotlib is not installed; nothing is written.
    """
    if figures is not None and find_spec("matplotlib") is None:
        raise CircuitgenError(
            "--figures needs matplotlib: pip install 'circuitgen[figures]'"
        )
    run = RunTables(run_folder)
    content = gather(run)
    path = run.path / REPORT
    text = page(run, content)
    with whole_file(path) as partial:
        partial.write_text(text, encoding="utf-8")
    if figures is None:
        return [path]
    from circuitgen.report.figures import draw_figures

    return [path, *draw_figures(content, Path(figures))]


def recording_troubles(run_folder: Path) -> list[str]:
    """Say in plain words which recordings a finished run cannot or does not meet."""
    return troubles(judged(RunTables(run_folder).recordings))
