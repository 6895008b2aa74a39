"""``circuitgen report``: the page of a finished run, and its figures as files."""

from __future__ import annotations

import argparse
from pathlib import Path

from circuitgen.commands.arguments import FINE, say


def run_report(arguments: argparse.Namespace) -> int:
    """Write the report of a run again, or its figures; print what was written."""
    from circuitgen.report import write_report

    page, *figures = write_report(arguments.run_folder, arguments.figures)
    say(f"report: {page}")
    for path in figures:
        say(f"figure: {path}")
    return FINE


def add_report_command(commands) -> None:
    """Declare ``circuitgen report``."""
    parser = commands.add_parser(
        "report", help="write the page of a finished run, and its figures"
    )
    parser.add_argument(
        "run_folder", type=Path, metavar="RUN", help="a finished run folder"
    )
    parser.add_argument(
        "--figures",
        type=Path,
        metavar="DIR",
        help="also write the figures as SVG and PNG (needs the extra 'figures')",
    )
    parser.set_defaults(run=run_report)
