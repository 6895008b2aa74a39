"""``circuitgen audit``: a circuit, ours or anyone's, against recordings."""

from __future__ import annotations

import argparse
import dataclasses
import json
import math
from pathlib import Path

from circuitgen.commands.arguments import DISAGREES, FINE, say
from circuitgen.commands.tables import write_rows
from circuitgen.core.errors import InputError, Problem


def run_audit(arguments: argparse.Namespace) -> int:
    """Audit a circuit and print what came out."""
    _check(arguments)
    from circuitgen.audit import (
        SliceView,
        audit,
        graph_facts,
        overall,
        read_degrees,
        read_triads,
    )

    circuit, recordings = _read(arguments)
    view = SliceView(arguments.run_folder) if arguments.run_folder else None
    names = (*circuit.type_names, *circuit.groups)
    triads = read_triads(arguments.triads, names) if arguments.triads else []
    degrees = read_degrees(arguments.degrees, names) if arguments.degrees else []
    slices = view.counts if view else None
    judged = audit(circuit, recordings, slices, triads, degrees)
    total = overall(judged)
    facts = graph_facts(circuit) if arguments.graph else None
    rows = [_finite(dataclasses.asdict(judgement)) for judgement in judged]
    if arguments.csv:
        write_rows(arguments.csv, rows)
    if arguments.json:
        content = {"overall": total, "rows": rows}
        say(json.dumps(content | ({"graph": facts} if facts else {})))
    else:
        _print(judged, total, facts)
    return DISAGREES if total["disagree"] else FINE


def _finite(row: dict) -> dict:
    """Return a row without numbers that JSON does not know."""
    return {
        name: None if isinstance(value, float) and not math.isfinite(value) else value
        for name, value in row.items()
    }


def _check(arguments: argparse.Namespace) -> None:
    """Refuse arguments that name no circuit or two, all faults at once."""
    faults = []
    foreign = [arguments.cells, arguments.edges]
    if arguments.run_folder and any(foreign):
        faults.append(("RUN", "is given beside --cells and --edges; keep one circuit"))
    if not arguments.run_folder:
        if not all(foreign):
            faults.append(("RUN", "is missing; without it give --cells and --edges"))
        if arguments.recordings is None:
            faults.append(("--recordings", "is missing; a circuit needs recordings"))
    if arguments.columns and arguments.run_folder:
        faults.append(("--columns", "belongs to --cells and --edges"))
    if faults:
        raise InputError([Problem("audit", None, name, rule) for name, rule in faults])


def _read(arguments: argparse.Namespace):
    """Return the circuit and the recordings to hold it against."""
    from circuitgen.audit import read_foreign, read_mapping, read_run
    from circuitgen.run import read_provenance, read_recorded
    from circuitgen.spec import Recording, parse_groups, read_recordings

    if arguments.run_folder:
        groups = parse_groups(read_provenance(arguments.run_folder)["spec_text"])
        circuit = read_run(arguments.run_folder, groups)
        if arguments.recordings is None:
            return circuit, read_recorded(arguments.run_folder)
    else:
        mapping = read_mapping(arguments.columns)
        circuit = read_foreign(arguments.cells, arguments.edges, mapping, {})
    names = (*circuit.type_names, *circuit.groups)
    outcomes = list(read_recordings(arguments.recordings, names))
    problems = [one for one in outcomes if not isinstance(one, Recording)]
    if not outcomes:
        problems = [Problem(str(arguments.recordings), None, "", "holds no recording")]
    if problems:
        raise InputError(problems)
    # Nobody fitted the circuit to a file that is brought along.
    return circuit, [one.model_copy(update={"use": "audit"}) for one in outcomes]


def _number(value: float | None) -> str:
    return "-" if value is None or not math.isfinite(value) else f"{value:.3g}"


def _print(judged, total: dict, facts: dict | None) -> None:
    """Print the verdicts, rows that entered the fit apart, in 80 columns."""
    for use, title in (
        ("audit", "Recordings that the circuit was not fitted to"),
        ("fit", "Recordings that entered the fit: agreeing with them proves little"),
    ):
        mine = [judgement for judgement in judged if judgement.use == use]
        if not mine:
            continue
        say(title)
        say(
            f"{'row':>4} {'pathway, measure':<31}{'measured':>8}{'circuit':>8}"
            f"{'q':>7}{'finds x':>8}  verdict"
        )
        for one in sorted(mine, key=lambda j: (j.q_value is None, j.q_value, j.row)):
            name = f"{one.pre_type} > {one.post_type}"
            if one.measure != "connection probability":
                words = one.measure.split()
                word = one.measure if words[0] == "triads" else words[0]
                name = f"{name[:17]}, {word}"
            say(
                f"{one.row:>4} {name[:30]:<31}{_number(one.measured):>8}"
                f"{_number(one.circuit):>8}{_number(one.q_value):>7}"
                f"{_number(one.detectable):>8}  {one.verdict}"
            )
            if one.note:
                say(f"     {one.note}")
        say("")
    say(
        f"{total['measures']} measures: {total['agree']} agree, {total['disagree']}"
        f" disagree, {total['cannot_tell']} cannot tell;"
        f" expected false alarms {total['expected_false_alarms']:g}"
    )
    say("finds x: smallest ratio of probabilities that the row would find, 80 % power")
    if facts:
        say("")
        say(
            f"{facts['cells']:,} cells, {facts['connections']:,} connections, density"
            f" {facts['density']:.4g}, reciprocity {facts['reciprocity']:.4g}"
        )
        for one in facts["degrees"]:
            say(
                f"  {one['cell_type'][:24]:<25}{one['cells']:>7}  out"
                f" {one['out_degree_mean']:8.1f} +- {one['out_degree_sd']:<7.1f} in"
                f" {one['in_degree_mean']:8.1f} +- {one['in_degree_sd']:.1f}"
            )
        for name, count in facts["triads"].items():
            say(f"  triads {name:<5}{count:>20,}")


def add_audit_command(commands) -> None:
    """Declare ``circuitgen audit``."""
    parser = commands.add_parser(
        "audit", help="hold a circuit against recordings; exit 1 where they disagree"
    )
    parser.add_argument(
        "run_folder", type=Path, nargs="?", metavar="RUN", help="a finished run"
    )
    parser.add_argument(
        "--recordings",
        type=Path,
        metavar="FILE",
        help="CSV of recordings; default: those of the run",
    )
    parser.add_argument(
        "--cells", type=Path, metavar="FILE", help="cells from elsewhere"
    )
    parser.add_argument("--edges", type=Path, metavar="FILE", help="their connections")
    parser.add_argument(
        "--columns",
        metavar="OURS=THEIRS,...",
        help="names of their columns, as pre_cell_id=source,post_cell_id=target",
    )
    parser.add_argument(
        "--triads",
        type=Path,
        metavar="FILE",
        help="CSV of counted triad classes: types, distance_high_um, class, count",
    )
    parser.add_argument(
        "--degrees",
        type=Path,
        metavar="FILE",
        help="CSV of measured spreads: types, direction (in or out),"
        " coefficient_of_variation, cells_n",
    )
    parser.add_argument(
        "--graph", action="store_true", help="also density, degrees and triads"
    )
    parser.add_argument("--csv", type=Path, metavar="FILE", help="write the rows there")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.set_defaults(run=run_audit)
