"""``circuitgen grow``: stand-in arbors."""

from __future__ import annotations

import argparse
from pathlib import Path

from circuitgen.commands.arguments import FINE, at_least_one, not_negative, say


def run_grow(arguments: argparse.Namespace) -> int:
    """Grow stand-in arbors."""
    from circuitgen.morphology import grow_files

    for path in grow_files(
        arguments.description, arguments.out, arguments.count, arguments.seed
    ):
        say(f"wrote {path}")
    return FINE


def add_grow_command(commands) -> None:
    """Declare ``circuitgen grow``."""
    parser = commands.add_parser("grow", help="grow stand-in arbors for a cell type")
    parser.add_argument("description", type=Path, metavar="DESCRIPTION")
    parser.add_argument("--out", type=Path, required=True, metavar="DIR")
    parser.add_argument(
        "--count", type=at_least_one, metavar="N", help="default: one per soma depth"
    )
    parser.add_argument(
        "--seed", type=not_negative, default=1, metavar="S", help="default: 1"
    )
    parser.set_defaults(run=run_grow)
