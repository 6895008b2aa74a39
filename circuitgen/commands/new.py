"""``circuitgen new``: a starter spec."""

from __future__ import annotations

import argparse
from pathlib import Path

from circuitgen.commands.arguments import FINE, say


def run_new(arguments: argparse.Namespace) -> int:
    """Write a starter spec."""
    from circuitgen.spec import write_starter

    for path in write_starter(arguments.folder):
        say(f"wrote {path}")
    spec = arguments.folder / "circuit.yaml"
    say(f"next: circuitgen build {spec} --out {arguments.folder / 'run'}")
    return FINE


def add_new_command(commands) -> None:
    """Declare ``circuitgen new``."""
    parser = commands.add_parser("new", help="write a small starter spec that builds")
    parser.add_argument("folder", type=Path, metavar="DIR", help="where it goes")
    parser.set_defaults(run=run_new)
