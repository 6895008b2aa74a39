"""The command line: one parser for all commands; errors become exit codes."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence

from circuitgen import __version__
from circuitgen.commands import (
    add_audit_command,
    add_build_command,
    add_grow_command,
    add_inspect_command,
    add_new_command,
    add_predict_command,
    add_report_command,
)
from circuitgen.commands.arguments import BAD_INPUT, INTERRUPTED
from circuitgen.core.errors import CircuitgenError

_CAUTION = (
    "Research use only: a predicted connection is a hypothesis, never grounds for"
    " diagnosis or treatment."
)


def make_parser() -> argparse.ArgumentParser:
    """Return the parser of all commands."""
    parser = argparse.ArgumentParser(
        prog="circuitgen",
        description="From cell densities, reconstructed neurons and paired recordings"
        " to a wired piece of cortex.",
        epilog=_CAUTION,
    )
    parser.add_argument("--version", action="version", version=__version__)
    parser.add_argument(
        "--debug", action="store_true", help="show the traceback of an error"
    )
    commands = parser.add_subparsers(title="commands", required=True, metavar="COMMAND")
    for add_command in (
        add_build_command,
        add_predict_command,
        add_audit_command,
        add_new_command,
        add_inspect_command,
        add_grow_command,
        add_report_command,
    ):
        add_command(commands)
    return parser


def main(words: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code."""
    arguments = make_parser().parse_args(words)
    try:
        return arguments.run(arguments)
    except CircuitgenError as error:
        if arguments.debug:
            raise
        sys.stderr.write(f"{error}\n")
        return BAD_INPUT
    except KeyboardInterrupt:
        if arguments.debug:
            raise
        sys.stderr.write("\nstopped; the same command continues from here\n")
        return INTERRUPTED


if __name__ == "__main__":
    sys.exit(main())
