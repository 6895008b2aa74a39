"""Commands and exit codes: 0 fine, 1 a check found disagreement, 2 bad input."""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Sequence
from pathlib import Path

from circuitgen import __version__
from circuitgen.core.errors import CircuitgenError

FINE, BAD_INPUT, INTERRUPTED = 0, 2, 130
_CAUTION = (
    "Research use only: a predicted connection is a hypothesis, never grounds for"
    " diagnosis or treatment."
)


def run_build(arguments: argparse.Namespace) -> int:
    """Build a circuit and print what came out."""
    from circuitgen.run import build

    outcome = build(
        arguments.spec,
        arguments.out,
        force=arguments.force,
        threads=arguments.threads,
    )
    if arguments.json:
        _print(json.dumps({"folder": str(outcome.folder), **outcome.summary}))
        return FINE
    if not outcome.built:
        _print(f"{outcome.folder} is finished already: same spec, inputs and version.")
    _print(_summary_text(outcome.summary))
    _print(f"run folder: {outcome.folder}")
    return FINE


def _summary_text(summary: dict[str, object]) -> str:
    """Lay the numbers of a build out in two columns."""
    met = f"{summary['recordings_met']} of {summary['recordings_with_counts']}"
    rows = [
        ("cells", f"{summary['cells']:,}"),
        ("ordered pairs", f"{summary['pairs']:,}"),
        ("touching pairs", f"{summary['touching_pairs']:,}"),
        ("appositions", f"{summary['appositions']:,}"),
        ("  per cell", f"{summary['appositions_per_cell']:,}"),
        ("  per touching pair", f"{summary['appositions_per_touching_pair']:,}"),
        ("connections", f"{summary['connections']:,}"),
        ("synapses", f"{summary['synapses']:,}"),
        ("recordings met", met),
    ]
    if summary["recordings_infeasible"]:
        rows.append(("infeasible (fit.csv)", f"{summary['recordings_infeasible']}"))
    return "\n".join(f"{name:<22}{value:>16}" for name, value in rows)


def add_build_command(commands) -> None:
    """Declare ``circuitgen build``."""
    parser = commands.add_parser("build", help="build a wired circuit from a spec file")
    parser.add_argument("spec", type=Path, metavar="SPEC", help="the YAML spec file")
    parser.add_argument(
        "--out", type=Path, required=True, metavar="RUN", help="the run folder to make"
    )
    parser.add_argument(
        "--force", action="store_true", help="replace a finished run of another spec"
    )
    parser.add_argument(
        "--threads", type=_at_least_one, metavar="N", help="default: all cores"
    )
    parser.add_argument("--json", action="store_true", help="print the summary as JSON")
    parser.set_defaults(run=run_build)


def run_new(arguments: argparse.Namespace) -> int:
    """Write a starter spec."""
    from circuitgen.spec import write_starter

    for path in write_starter(arguments.folder):
        _print(f"wrote {path}")
    spec = arguments.folder / "circuit.yaml"
    _print(f"next: circuitgen build {spec} --out {arguments.folder / 'run'}")
    return FINE


def add_new_command(commands) -> None:
    """Declare ``circuitgen new``."""
    parser = commands.add_parser("new", help="write a small starter spec that builds")
    parser.add_argument("folder", type=Path, metavar="DIR", help="where it goes")
    parser.set_defaults(run=run_new)


def run_grow(arguments: argparse.Namespace) -> int:
    """Grow stand-in arbors."""
    from circuitgen.morphology import grow_files

    for path in grow_files(
        arguments.description, arguments.out, arguments.count, arguments.seed
    ):
        _print(f"wrote {path}")
    return FINE


def add_grow_command(commands) -> None:
    """Declare ``circuitgen grow``."""
    parser = commands.add_parser("grow", help="grow stand-in arbors for a cell type")
    parser.add_argument("description", type=Path, metavar="DESCRIPTION")
    parser.add_argument("--out", type=Path, required=True, metavar="DIR")
    parser.add_argument(
        "--count", type=_at_least_one, metavar="N", help="default: one per soma depth"
    )
    parser.add_argument(
        "--seed", type=_not_negative, default=1, metavar="S", help="default: 1"
    )
    parser.set_defaults(run=run_grow)


def _whole_number(text: str, least: int) -> int:
    value = int(text) if text.strip().lstrip("+-").isdigit() else least - 1
    if not least <= value < 2**64:
        raise argparse.ArgumentTypeError(f"{text!r} must be a whole number >= {least}")
    return value


def _at_least_one(text: str) -> int:
    return _whole_number(text, 1)


def _not_negative(text: str) -> int:
    return _whole_number(text, 0)


def _print(text: str) -> None:
    sys.stdout.write(f"{text}\n")


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
    add_build_command(commands)
    add_new_command(commands)
    add_grow_command(commands)
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
