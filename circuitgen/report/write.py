"""Writes the page and the figures of a finished run."""

from __future__ import annotations

from pathlib import Path

from circuitgen.core.files import whole_file
from circuitgen.report.content import gather
from circuitgen.report.page import page
from circuitgen.report.source import RunTables

REPORT = "report.html"


def write_report(run_folder: Path) -> Path:
    """Write ``report.html`` into a run folder, from its tables alone; return its path.

    Raises RunFolderError where the folder holds no finished run.
    """
    run = RunTables(run_folder)
    text = page(run, gather(run))
    path = run.path / REPORT
    with whole_file(path) as partial:
        partial.write_text(text, encoding="utf-8")
    return path


def write_figures(run_folder: Path, out: Path) -> list[Path]:
    """Write each figure as SVG and PNG into a folder; return the files.

    Raises RunFolderError as `write_report`; ReportError without matplotlib.
    """
    from circuitgen.report.figures import draw_figures

    return draw_figures(gather(RunTables(run_folder)), Path(out))
