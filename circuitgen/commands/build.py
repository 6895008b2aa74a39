"""``circuitgen build``: from a spec to a run folder."""

from __future__ import annotations

import argparse
import json
from pathlib import Path

from circuitgen.commands.arguments import FINE, at_least_one, say

# As many as the wiring room keeps (a test compares): importing it here is slow.
_DRAWS_N = 400
TROUBLES_SHOWN = 5


def run_build(arguments: argparse.Namespace) -> int:
    """Build a circuit and print what came out."""
    from circuitgen.run import build

    outcome = build(
        arguments.spec,
        arguments.out,
        force=arguments.force,
        threads=arguments.threads,
        draw=arguments.draw,
    )
    if arguments.json:
        say(json.dumps({"folder": str(outcome.folder), **outcome.summary}))
        return FINE
    if not outcome.built:
        say(f"{outcome.folder} is finished already: same spec, inputs and version.")
    say(_summary_text(outcome.summary))
    for line in _troubles(outcome.folder):
        say(line)
    say(f"run folder: {outcome.folder}")
    say(f"report:     {outcome.folder / 'report.html'}")
    return FINE


def _troubles(folder: Path) -> list[str]:
    """Return what the circuit does not meet, the first few in full, for 80 columns."""
    from circuitgen.core.progress import wrapped
    from circuitgen.report import recording_troubles

    found = recording_troubles(folder)
    lines = [wrapped(line) for line in found[:TROUBLES_SHOWN]]
    hidden = len(found) - len(lines)
    return lines + ([f"… and {hidden} more: see the report"] if hidden else [])


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


def _draw_number(text: str) -> int:
    value = at_least_one(text)
    if value > _DRAWS_N:
        raise argparse.ArgumentTypeError(f"{text!r} must be 1 to {_DRAWS_N}")
    return value


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
        "--threads", type=at_least_one, metavar="N", help="default: all cores"
    )
    parser.add_argument(
        "--draw",
        type=_draw_number,
        metavar="K",
        help=f"draw with the K-th posterior draw of the laws, 1 to {_DRAWS_N}",
    )
    parser.add_argument("--json", action="store_true", help="print the summary as JSON")
    parser.set_defaults(run=run_build)
