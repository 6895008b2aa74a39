"""The page: a template filled with escaped text, and the data as JSON."""

from __future__ import annotations

from importlib.resources import files
from string import Template

from circuitgen.report.elements import (
    axis_end,
    axis_ticks,
    embedded_json,
    number,
    recording_plot,
    text,
)
from circuitgen.report.recordings import VERDICTS, troubles
from circuitgen.report.source import RunTables

_SCRIPTS = ("base", "charts", "recordings", "matrix", "pathway", "column", "network")
_SCRIPTS += ("pair", "start")
_MARKS = {"agrees": "✓", "too high": "▲", "too low": "▼", "cannot tell": "?"}


def _template(name: str) -> str:
    return (files("circuitgen.report") / "templates" / name).read_text(encoding="utf-8")


def page(run: RunTables, content: dict) -> str:
    """Return the whole page as HTML."""
    recordings = content["recordings"]
    found = troubles(recordings)
    fields = {
        "name": text(run.provenance["spec_name"]),
        "built": _built(run),
        "numbers": _numbers(run.provenance["summary"]),
        "verdicts": _verdict_counts(recordings),
        "recordings": _recordings(run, recordings),
        "matrix_words": _matrix_words(content),
        "warnings": _warnings(run.provenance["summary"], found),
        "cite": _cite(run),
        "spec_text": text(run.provenance["spec_text"]),
        "style": _template("page.css"),
        "data": embedded_json(content),
        "script": "\n".join(_template(f"{name}.js") for name in _SCRIPTS),
    }
    return Template(_template("page.html")).substitute(fields)


def _built(run: RunTables) -> str:
    stored = run.provenance
    column = run.spec["column"]
    size = ", ".join(
        f"{key.removesuffix('_um').replace('_', ' ')} {number(float(column[key]))} µm"
        for key in ("diameter_um", "across_flats_um", "width_um", "length_um")
        if key in column
    )
    shape = f"{column['shape']}{', ' + size if size else ''}"
    rows = [
        ("Circuit", stored["spec_name"]),
        ("Column", f"{shape}, {column.get('edges', 'open')} edges"),
        ("Seed", stored["seed"]),
        ("Made by", f"circuitgen {stored['circuitgen']}"),
        ("Finished", stored["finished"]),
        ("SHA-256 of the spec", stored["spec_sha256"]),
        ("Fingerprint of the run", stored["fingerprint"]),
    ]
    return "".join(f"<dt>{text(k)}</dt><dd>{text(v)}</dd>" for k, v in rows)


def _numbers(summary: dict) -> str:
    keys = (
        ("cells", "cells"),
        ("cell_types", "cell types"),
        ("pairs", "ordered pairs"),
        ("touching_pairs", "pairs with an apposition"),
        ("appositions", "appositions"),
        ("connections", "connections drawn"),
        ("synapses", "synapses drawn"),
    )
    return "".join(
        f'<li><b data-number="{key}">{number(summary[key])}</b> {words}</li>'
        for key, words in keys
    )


def _verdict_counts(recordings: list[dict]) -> str:
    if not recordings:
        return "This run has no recordings."
    counts = {v: sum(row["verdict"] == v for row in recordings) for v in VERDICTS}
    kept = sum(row["use"] == "audit" for row in recordings)
    said = ", ".join(f"“{verdict}” {n}" for verdict, n in counts.items() if n)
    return (
        f"Recordings: {len(recordings)}. Verdicts: {said}. Kept out of the fit: {kept}."
    )


def _window(row: dict) -> str:
    low, high = row["distance_low_um"] or 0.0, row["distance_high_um"]
    reach = f"{number(low)}–{number(high)} µm" if high is not None else "any distance"
    if high is None and low:
        reach = f"from {number(low)} µm"
    return f"{reach}, {'in space' if row['distance_kind'] == 'soma' else 'lateral'}"


def _tone(run: RunTables, name: str) -> str:
    """Return the class of a presynaptic type's or group's colour."""
    members = (run.spec.get("groups") or {}).get(name, (name,))
    signs = {run.is_excitatory[run.type_names.index(member)] for member in members}
    return "mixed" if len(signs) > 1 else "exc" if signs == {True} else "inh"


def _measured(row: dict) -> str:
    if row["p_measured"] is None:
        return "–"
    counts = ""
    if row["tested_n"] is not None:
        counts = f"{row['connected_n']} of {row['tested_n']}"
        counts += f" ({number(row['p_measured_low'])}–{number(row['p_measured_high'])})"
    return f"<b>{number(row['p_measured'])}</b> <small>{counts}</small>"


def _recordings(run: RunTables, rows: list[dict]) -> str:
    keys = ("p_measured", "p_measured_high", "p_realised")
    end = axis_end([row[key] for row in rows for key in keys])
    heads = [
        ("row", "No."),
        ("pathway", "Pathway and window"),
        ("", f"Connection probability{axis_ticks(end)}"),
        ("measured", "Measured (95&nbsp;%)"),
        ("circuit", "Circuit"),
        ("synapses", "Synapses per connection"),
        ("verdict", "Verdict"),
    ]
    head = "".join(
        f'<th scope="col" class="c-{key}" aria-sort="none">'
        f'<button type="button" data-sort="{key}">{words}</button></th>'
        if key
        else f'<th scope="col" class="c-plot">{words}</th>'
        for key, words in heads
    )
    body = "\n".join(_recording_row(run, row, end) for row in rows)
    return f"<thead><tr>{head}</tr></thead><tbody>{body}</tbody>"


def _recording_row(run: RunTables, row: dict, end: float) -> str:
    name = f"{row['pre_type']} → {row['post_type']}"
    label = (
        f"{name}: measured {number(row['p_measured'])}, interval"
        f" {number(row['p_measured_low'])} to {number(row['p_measured_high'])},"
        f" circuit {number(row['p_realised'])}"
    )
    order = {
        "row": row["row"],
        "pathway": name,
        "measured": row["p_measured"],
        "circuit": row["p_realised"],
        "synapses": row["synapses_mean_realised"],
        "verdict": (2, 0, 1, 3)[VERDICTS.index(row["verdict"])],
    }
    data = "".join(f' data-{key}="{text(value)}"' for key, value in order.items())
    kept = (
        ' <span class="kept">kept out of the fit</span>' if row["use"] == "audit" else ""
    )
    drawn = number(row["synapses_mean_realised"])
    measured = number(row["synapses_mean_measured"])
    plot = recording_plot(row, end, _tone(run, row["pre_type"]), label)
    word = row["verdict"]
    return (
        f'<tr{data}><td class="c-row">{row["row"]}</td>'
        f'<th scope="row" class="c-pathway"><span class="name">{text(row["pre_type"])}'
        f" → {text(row['post_type'])}</span> <small>{text(_window(row))}"
        f"{' · ' if row['source'] else ''}{text(row['source'])}{kept}</small></th>"
        f'<td class="c-plot">{plot}</td>'
        f'<td class="c-measured">{_measured(row)}</td>'
        f'<td class="c-circuit"><b>{number(row["p_realised"])}</b></td>'
        f'<td class="c-synapses"><span><small>measured</small> {measured}</span> '
        f"<span><small>circuit</small> {drawn}</span></td>"
        f'<td class="c-verdict v-{word.replace(" ", "-")}">'
        f'<span aria-hidden="true">{_MARKS[word]}</span> {word}</td></tr>'
    )


def _matrix_words(content: dict) -> str:
    rows = content["pathways"]
    known = [row for row in rows if row["p_connect"] is not None]
    recorded = sum(row["recorded"] for row in rows)
    words = f"{len(rows)} pathways, {recorded} of them recorded."
    if known:
        top = max(known, key=lambda row: row["p_connect"])
        words += (
            f" The most probable: {top['pre_type']} → {top['post_type']},"
            f" {number(top['p_connect'])}."
        )
    empty = len(rows) - len(known)
    if empty:
        words += f" {empty} have no pair within the window, and no number."
    return text(words)


def _warnings(summary: dict, found: list[str]) -> str:
    parts = []
    for title, lines in (
        ("Recordings that the circuit does not meet", found),
        ("Warnings of the build", summary["warnings"]),
        ("Repairs to reconstructions", summary["repairs"]),
    ):
        shown = "".join(f"<li>{text(line)}</li>" for line in lines)
        parts.append(
            f"<h3>{title}</h3><ul>{shown}</ul>" if lines else f"<p>{title}: none.</p>"
        )
    return "".join(parts)


def _cite(run: RunTables) -> str:
    stored = run.provenance
    libraries = ", ".join(f"{k} {v}" for k, v in stored["libraries"].items())
    cited = (
        f"Circuit “{stored['spec_name']}”, seed {stored['seed']}, built with circuitgen"
        f" {stored['circuitgen']}; spec SHA-256 {stored['spec_sha256']}."
    )
    hashes = "".join(
        f"<tr><th scope='row'>{text(name)}</th><td><code>{text(value)}</code></td></tr>"
        for name, value in stored["tables_sha256"].items()
    )
    return (
        f"<p>Cite the run as:</p><blockquote>{text(cited)}</blockquote>"
        "<p>To build the same tables again: save the spec shown under “What was built”"
        " beside the same recordings and reconstructions (provenance.json lists them"
        " with their SHA-256), and run</p><pre>circuitgen build SPEC --out RUN</pre>"
        f"<p>with Python {text(stored['python'])} and {text(libraries)}.</p>"
        "<details><summary>SHA-256 of the tables</summary>"
        f'<div class="scroll"><table class="plain">{hashes}</table></div></details>'
    )
