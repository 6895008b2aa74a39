"""``circuitgen inspect``: look at reconstructions before they are used."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path

from circuitgen.commands.arguments import BAD_INPUT, DISAGREES, FINE, say
from circuitgen.core.errors import InputError, Problem

_UPRIGHT = ("x", "y", "z", "-x", "-y", "-z")


def run_inspect(arguments: argparse.Namespace) -> int:
    """Inspect files, print what was found, write the page and the mended files."""
    from circuitgen.inspection import inspect_file, mend_files, page_html, table_text

    _check_page_name(arguments.html)
    sheets, problems = [], []
    for path, upright in _files(arguments).items():
        try:
            sheets.append(inspect_file(path, upright))
        except InputError as error:
            problems += error.problems
    mended = mend_files(sheets, arguments.fix_to) if arguments.fix_to else []
    if arguments.html:
        _write(arguments.html, page_html(sheets))
    if arguments.json:
        result = {
            "files": [sheet.as_dict() for sheet in sheets],
            "unreadable": [str(problem) for problem in problems],
            "mended": [str(path) for path in mended],
        }
        say(json.dumps(result, indent=1))
    elif sheets:
        say(table_text(sheets))
        if arguments.fix_to:
            say(_mended_text(len(mended), len(sheets), arguments.fix_to))
        if arguments.html:
            say(f"page: {arguments.html}")
    for problem in problems:
        sys.stderr.write(f"{problem}\n")
    if problems:
        return BAD_INPUT
    return FINE if all(sheet.usable for sheet in sheets) else DISAGREES


def _files(arguments: argparse.Namespace) -> dict[Path, str]:
    """Return the files to inspect, each once, with their axis toward the pia."""
    by_spec, ask = {}, "name SWC files, or a spec with --spec SPEC"
    if arguments.spec:
        from circuitgen.spec import load_spec

        for cell_type in load_spec(arguments.spec).cell_types:
            for path in cell_type.morphologies:
                by_spec[path.resolve()] = (path, cell_type.upright)
    if not arguments.files:
        if not by_spec:
            raise InputError([Problem("circuitgen inspect", None, "", ask)])
        return dict(by_spec.values())
    default = arguments.upright or "y"
    return {
        path: by_spec.get(path.resolve(), (path, default))[1] for path in arguments.files
    }


def _check_page_name(path: Path | None) -> None:
    """Refuse a name that may be a reconstruction's, before anything is written."""
    if path and path.suffix.lower() not in (".html", ".htm"):
        rule = "must end in .html, so that no other file is replaced by the page"
        raise InputError([Problem(str(path), None, "--html", rule)])


def _write(path: Path, text: str) -> None:
    """Write the page, whole or not at all."""
    from circuitgen.core.files import whole_file

    try:
        with whole_file(path) as partial:
            partial.write_text(text, encoding="utf-8", newline="\n")
    except OSError as error:
        rule = f"cannot be written: {error.strerror or error}"
        raise InputError([Problem(str(path), None, "--html", rule)]) from None


def _mended_text(mended_n: int, files_n: int, folder: Path) -> str:
    text = f"{mended_n} of {files_n} files mended"
    return f"{text}; the others needed no repair, or could not be read.\nin: {folder}"


def add_inspect_command(commands) -> None:
    """Declare ``circuitgen inspect``."""
    parser = commands.add_parser(
        "inspect",
        help="look at reconstructions before they are used",
        description="Measures SWC files and tells what would spoil the connectivity."
        " Exit 1 when a file cannot be used.",
    )
    parser.add_argument("files", type=Path, nargs="*", metavar="FILE")
    axis = parser.add_mutually_exclusive_group()
    axis.add_argument(
        "--upright",
        choices=_UPRIGHT,
        metavar="AXIS",
        help="the files' axis toward the pia: x, y, z, -x, -y or -z; y by default"
        " (write --upright=-z)",
    )
    axis.add_argument(
        "--spec",
        type=Path,
        metavar="SPEC",
        help="take the axis from a spec; without FILE, inspect all that it names",
    )
    parser.add_argument("--json", action="store_true", help="print the result as JSON")
    parser.add_argument(
        "--html", type=Path, metavar="PAGE", help="write a page with drawings"
    )
    parser.add_argument(
        "--fix-to",
        type=Path,
        metavar="DIR",
        help="write repaired files into a folder; overwrites nothing",
    )
    parser.set_defaults(run=run_inspect)
