"""``circuitgen predict``: connectivity of pathways and pairs, recorded or not."""

from __future__ import annotations

import argparse
import json
import math
from pathlib import Path

from circuitgen.commands.arguments import FINE, number, say
from circuitgen.commands.tables import write_rows
from circuitgen.core.errors import InputError, Problem
from circuitgen.core.progress import wrapped

_ROWS_SHOWN = 40


def run_predict(arguments: argparse.Namespace) -> int:
    """Predict what was asked for and print it."""
    _check(arguments)
    from circuitgen.prediction import RunTables

    tables = RunTables(arguments.run_folder)
    if arguments.leave_one_out:
        return _leave_one_out(tables, arguments)
    if arguments.cells:
        return _cells(tables, arguments)
    if arguments.pre:
        return _pathway(tables, arguments)
    return _all_pathways(tables, arguments)


def _check(arguments: argparse.Namespace) -> None:
    """Refuse options that make no sense together, all at once."""
    faults = []
    if (arguments.pre is None) != (arguments.post is None):
        faults.append(("--pre", "and --post go together"))
    if arguments.slice is not None and arguments.pre is None:
        faults.append(("--slice", "needs one pathway: --pre and --post"))
    if arguments.soma_depth and arguments.slice is None:
        faults.append(("--soma-depth", "needs --slice"))
    low, high = arguments.distance_um or (0.0, 1.0)
    if not 0 <= low < high:
        faults.append(("--distance-um", f"= {low:g} {high:g} must be 0 <= LOW < HIGH"))
    if arguments.soma_depth and arguments.slice is not None:
        low, high = arguments.soma_depth
        if not 0 <= low <= high <= arguments.slice:
            faults.append(("--soma-depth", "must lie within the slice, LOW <= HIGH"))
    if arguments.slice is not None and not arguments.slice > 0:
        faults.append(("--slice", "must be > 0"))
    whole = [arguments.leave_one_out, arguments.cells is not None]
    if sum(whole) + (arguments.pre is not None) > 1:
        faults.append(("--pre", "--cells and --leave-one-out exclude each other"))
    if any(whole) and arguments.distance_um:
        faults.append(("--distance-um", "belongs to pathways"))
    if arguments.lateral and not arguments.distance_um:
        faults.append(("--lateral", "needs --distance-um"))
    if faults:
        raise InputError([Problem("predict", None, name, rule) for name, rule in faults])


def _window(arguments) -> tuple[float, float]:
    return tuple(arguments.distance_um) if arguments.distance_um else (0.0, math.inf)


def _emit(arguments, content: dict, rows: list[dict], lines: list[str]) -> int:
    """Print JSON or lines; write the rows as CSV where asked."""
    if arguments.csv:
        write_rows(arguments.csv, rows)
    if arguments.json:
        say(json.dumps(content, allow_nan=False, default=str))
    else:
        for line in lines:
            say(line)
    return FINE


def _share(summary: dict) -> str:
    """Show a median and its 90 % interval."""
    if summary["median"] is None:
        return f"{'-':>21}"
    return f"{summary['median']:6.3f} {summary['low']:6.3f}-{summary['high']:<6.3f} "


def _pathway_lines(rows: list[dict], known: set) -> list[str]:
    head = f"{'pathway':<37}{'':2}{'p':>5} {'90 % interval':<14}{'synapses':>9}  90 %"
    lines = [head]
    for row in rows:
        mark = "*" if (row["pre_type"], row["post_type"]) in known else " "
        name = f"{row['pre_type']} > {row['post_type']}"
        mean = row["synapses_mean"]
        number = "-"
        if mean["median"] is not None:
            number = f"{mean['median']:5.1f}  {mean['low']:.1f}-{mean['high']:.1f}"
        lines.append(f"{name[:36]:<36}{mark} {_share(row['p_connect'])}{number:>6}")
    return lines


def _all_pathways(tables, arguments) -> int:
    from circuitgen.prediction import everyone, predict_window, stored_predictions

    stored = stored_predictions(tables)
    known = {(r["pre_type"], r["post_type"]) for r in stored if r["recorded"]}
    rows, where = stored, "in the window of its own recording, else within 100 um"
    if arguments.distance_um:
        protocol = everyone(tables, *_window(arguments), lateral=arguments.lateral)
        rows = predict_window(tables, protocol)
        where = "somata {:g} to {:g} um apart".format(*_window(arguments))
    lines = _pathway_lines(rows[:_ROWS_SHOWN], known)
    if len(rows) > _ROWS_SHOWN:
        lines.append(f"... and {len(rows) - _ROWS_SHOWN} more: --csv FILE has all")
    lines.append(wrapped(f"* recorded. p: each pathway {where}. Least known first."))
    lines += map(wrapped, tables.provenance["summary"]["warnings"])
    return _emit(arguments, {"pathways": rows, "window": where}, rows, lines)


def _pathway(tables, arguments) -> int:
    from circuitgen.prediction import curve, prediction_row, recorded_points

    pre, post = arguments.pre, arguments.post
    code = tables.code(pre, post)
    row = prediction_row(tables, code, _histogram(tables, code, arguments))
    bins, points = curve(tables, pre, post), recorded_points(tables, pre, post)
    content = {"pathway": row, "curve": bins, "recordings": points}
    lines = [
        f"{pre} > {post}: {row['pairs']:,.0f} pairs, {_percent(row['p_ceiling'])} touch",
        f"connection probability {_share(row['p_connect'])} (90 % interval)",
        f"synapses a connection  {_share(row['synapses_mean'])}",
        "",
        f"{'somata apart, um':<18}{'pairs':>9}{'touch':>8}   p and its 90 % interval",
    ]
    for part in bins:
        summary = {
            "median": part["p_connect"],
            "low": part["p_connect_low"],
            "high": part["p_connect_high"],
        }
        window = f"{part['distance_low_um']:g}-{part['distance_high_um']:g}"
        touch = _percent(part["p_ceiling"])
        bar = "" if summary["median"] is None else "|" * round(40 * summary["median"])
        line = f"{window:<18}{part['pairs_n']:>9,}{touch:>8}  {_share(summary)} {bar}"
        lines.append(line[:79].rstrip())
    lines += ["", "recordings of this pathway:" if points else "nobody recorded it"]
    for point in points:
        low, high = point["distance_low_um"] or 0, point["distance_high_um"]
        apart = f"{low:g}-{high:g} um" if high is not None else f"from {low:g} um"
        counted = "" if point["tested_n"] is None else (
            f"{point['connected_n']:.0f}/{point['tested_n']:.0f}")  # fmt: skip
        p = "-" if point["p_measured"] is None else f"{point['p_measured']:.3f}"
        lines.append(f"  row {point['row']}: {apart}, {counted} p = {p}, {point['use']}")
    return _emit(arguments, content, bins, lines)


def _percent(share: float | None) -> str:
    return "-" if share is None else f"{share:.1%}"


def _histogram(tables, code: int, arguments):
    """Return the pairs of one pathway in the window or slice asked for."""
    from circuitgen.appositions import Slice
    from circuitgen.prediction import slice_histogram
    from circuitgen.run import Protocol, ReopenedCircuit

    low, high = _window(arguments)
    pre, post = divmod(code, tables.types_n)
    if arguments.slice is None:
        protocol = Protocol((pre,), (post,), low, high, arguments.lateral)
        return tables.histograms(protocol)[code]
    depth_low, depth_high = arguments.soma_depth or (0.0, arguments.slice)
    if depth_high - depth_low < 1.0:
        depth_low, depth_high = depth_low - 0.5, depth_high + 0.5
    cut = Slice(arguments.slice, depth_low, depth_high)
    circuit = ReopenedCircuit(arguments.run_folder)
    places = [circuit.spec.type_names.index(tables.type_names[t]) for t in (pre, post)]
    protocol = Protocol((places[0],), (places[1],), low, high, arguments.lateral, cut)
    return slice_histogram(circuit, protocol)


def _cells(tables, arguments) -> int:
    from circuitgen.prediction import predict_pairs, read_pairs

    rows = predict_pairs(tables, read_pairs(tables, arguments.cells))
    lines = [f"{'pre':<20}{'post':<20}{'um':>6}{'a':>4} {'p':>6} {'90 %':<14}synapses"]
    for row in rows:
        ends = [
            row[f"{side}_type"][:13]
            + ("" if row[f"{side}_cell_id"] is None else f" {row[f'{side}_cell_id']}")
            for side in ("pre", "post")
        ]
        lines.append(
            f"{ends[0]:<20}{ends[1]:<20}{row['soma_distance_um']:>6.0f}"
            f"{row['appositions_n']:>4} {_share(row['p_connect'])}"
            f"{row['synapses_expected']['median']:6.2f}"
        )
    return _emit(arguments, {"pairs": rows}, rows, lines)


def _leave_one_out(tables, arguments) -> int:
    from circuitgen.prediction import leave_one_out

    found = leave_one_out(tables)
    lines = [
        f"{'row':>4}  {'pathway':<36}{'measured':>8}  {'the others say':<20}surprise"
    ]
    for row in found["rows"]:
        name = f"{row['pre_type']} > {row['post_type']}"
        lines.append(
            f"{row['row']:>4}  {name[:35]:<36}{row['p_measured']:>7.3f} "
            f"{_share(row['p_predicted'])} {row['surprise_p']:.3f}"
        )
    if "gain" in found:
        lines += [
            "",
            f"coverage of 90 % intervals {found['coverage_90']:.3f}, of 50 % intervals"
            f" {found['coverage_50']:.3f}, {found['recordings_n']} recordings",
            f"log score {found['log_score']:.3f} a recording; plain rules:",
        ]
        plain = found["log_score_plain"].items()
        lines += [f"  {name:<36}{value:.3f}" for name, value in plain]
    lines += ["", wrapped(found["sentence"])]
    return _emit(arguments, found, found["rows"], lines)


def add_predict_command(commands) -> None:
    """Declare ``circuitgen predict``."""
    parser = commands.add_parser(
        "predict", help="connectivity of pathways and pairs, recorded or not"
    )
    parser.add_argument("run_folder", type=Path, metavar="RUN", help="a finished run")
    parser.add_argument("--pre", metavar="TYPE", help="one pathway: presynaptic type")
    parser.add_argument("--post", metavar="TYPE", help="postsynaptic type")
    parser.add_argument(
        "--distance-um",
        type=number,
        nargs=2,
        metavar=("LOW", "HIGH"),
        help="window of the distance between somata",
    )
    parser.add_argument(
        "--lateral", action="store_true", help="the distance is lateral, not in space"
    )
    parser.add_argument(
        "--slice", type=number, metavar="UM", help="record in a slice so thick"
    )
    parser.add_argument(
        "--soma-depth",
        type=number,
        nargs=2,
        metavar=("LOW", "HIGH"),
        help="depths of both somata below the face of the slice, um",
    )
    parser.add_argument(
        "--cells", type=Path, metavar="FILE", help="CSV list of individual pairs"
    )
    parser.add_argument(
        "--leave-one-out",
        action="store_true",
        help="predict each recording from the others: can the intervals be trusted?",
    )
    parser.add_argument("--csv", type=Path, metavar="FILE", help="write the table there")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.set_defaults(run=run_predict)
