"""The inspection as one page: drawings, numbers and findings, without any script."""

from __future__ import annotations

from collections.abc import Sequence
from html import escape
from importlib.resources import files

from circuitgen import __version__
from circuitgen.inspection.drawing import drawings
from circuitgen.inspection.measures import Measures
from circuitgen.inspection.remarks import Remark, printable
from circuitgen.inspection.sheet import Sheet

_PROBLEMS_SHOWN = 10
# The page may load nothing, from nowhere; its own styles apart.
_POLICY = "default-src 'none'; style-src 'unsafe-inline'"
_KEY = (
    '<p class="key"><span><i class="axon"></i>axon</span>'
    '<span><i class="dendrite"></i>dendrite</span>'
    '<span><i class="soma"></i>soma</span></p>'
)


def page_html(sheets: Sequence[Sheet]) -> str:
    """Return the page on the inspected files, whole and self-contained."""
    style = files("circuitgen.inspection").joinpath("page.css").read_text("utf-8")
    articles = "\n".join(_article(sheet, i) for i, sheet in enumerate(sheets, 1))
    return f"""\
<!doctype html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta http-equiv="Content-Security-Policy" content="{_POLICY}">
<title>Reconstructions inspected</title>
<style>
{style}</style>
</head>
<body>
<h1>Reconstructions inspected</h1>
{_overview(sheets)}
{_KEY}
<main>
{articles}
</main>
<p class="quiet">circuitgen {escape(__version__)}. Both drawings of a cell have one
scale; cells have scales of their own. Research use only.</p>
</body>
</html>
"""


def _text(value: object) -> str:
    return escape(printable(value), quote=True)


def _verdict(sheet: Sheet) -> str:
    """Tell in a few words whether a file can be used."""
    if not sheet.usable:
        return '<b class="blocks">unusable</b>'
    if sheet.number_of("warning"):
        return '<b class="warning">look at it</b>'
    return "fine"


def _overview(sheets: Sequence[Sheet]) -> str:
    usable = sum(sheet.usable for sheet in sheets)
    rows = []
    for i, sheet in enumerate(sheets, 1):
        m = sheet.measures
        lengths = (m.axon_um, m.dendrite_um) if m else (None, None)
        cells = ["–" if um is None else f"{um / 1000:.1f}" for um in lengths]
        name = f'<a href="#file-{i}">{_text(sheet.path.name)}</a>'
        cells = "".join(f"<td>{cell}</td>" for cell in [*cells, _verdict(sheet)])
        rows.append(f"<tr><td>{name}</td>{cells}</tr>")
    return f"""\
<p>{usable} of {len(sheets)} files can be used in a circuit.</p>
<table>
<thead><tr><th scope="col">file</th><th scope="col">axon, mm</th>
<th scope="col">dendrite, mm</th><th scope="col">verdict</th></tr></thead>
<tbody>
{"".join(rows)}
</tbody>
</table>"""


def _article(sheet: Sheet, number: int) -> str:
    """Write what there is on one file."""
    header = f"<header><h2>{_text(sheet.path.name)}</h2>{_verdict(sheet)}"
    header += f'<p class="quiet">{_text(sheet.path)}</p></header>'
    views = ""
    if sheet.arbor is not None:
        figures = "".join(
            f"<figure>{svg}<figcaption>{_text(caption)}</figcaption></figure>"
            for svg, caption in drawings(sheet.arbor, sheet.upright, sheet.path.name)
        )
        views = f'<div class="views">{figures}</div>'
    told = f"<div>{_numbers(sheet.measures)}{_remarks(sheet.remarks)}</div>"
    return f'<article id="file-{number}">\n{header}\n{views}\n{told}\n</article>'


def _numbers(m: Measures | None) -> str:
    """List the measures of a file."""
    if m is None:
        return ""
    extent = " × ".join(f"{value:,.0f}" for value in m.extent_um)
    middle, least, largest = m.radius_um
    pairs = [
        ("axon", f"{m.axon_um / 1000:,.2f} mm"),
        ("basal dendrites", f"{m.basal_um / 1000:,.2f} mm"),
        ("apical dendrite", f"{m.apical_um / 1000:,.2f} mm"),
        ("extent x, y, z", f"{extent} µm"),
        ("tips, axon", f"{m.axon_tips_n:,}"),
        ("tips, dendrites", f"{m.dendrite_tips_n:,}"),
        ("branch points", f"{m.branch_points_n:,}"),
        ("longest axon path", f"{m.longest_axon_path_um:,.0f} µm"),
        ("longest dendrite path", f"{m.longest_dendrite_path_um:,.0f} µm"),
        ("radius, median", f"{middle:.3g} µm"),
        ("radius, from and to", f"{least:.3g} to {largest:.3g} µm"),
        ("soma radius", f"{m.soma_radius_um:.3g} µm"),
    ]
    items = "".join(
        f"<div><dt>{name}</dt><dd>{value}</dd></div>" for name, value in pairs
    )
    return f"<dl>{items}</dl>"


def _remarks(remarks: Sequence[Remark]) -> str:
    """List the remarks on a file."""
    if not remarks:
        return '<p class="quiet">No findings.</p>'
    if remarks[0].code == "refused":
        return _refusal(remarks)
    items = "".join(_remark(remark) for remark in remarks)
    return f'<ul class="remarks">{items}</ul>'


def _refusal(remarks: Sequence[Remark]) -> str:
    """Tell why the reader refused a file: all problems have one effect."""
    lines = [f"<p>{_text(remark.seen)}</p>" for remark in remarks[:_PROBLEMS_SHOWN]]
    if len(remarks) > _PROBLEMS_SHOWN:
        lines.append(f"<p>… and {len(remarks) - _PROBLEMS_SHOWN} problems more</p>")
    return (
        '<ul class="remarks"><li class="blocks"><p><b class="blocks">blocks</b>:'
        f" the file was refused</p>{''.join(lines)}"
        f"<p>For the circuit: {_text(remarks[0].effect)}</p>"
        f"<p>To do: {_text(remarks[0].remedy)}</p></li></ul>"
    )


def _remark(remark: Remark) -> str:
    line = f" (from line {remark.line})" if remark.line else ""
    return (
        f'<li class="{remark.severity}"><p><b class="{remark.severity}">'
        f"{remark.severity}</b>: {_text(remark.seen)}{line}</p>"
        f"<p>For the circuit: {_text(remark.effect)}</p>"
        f"<p>To do: {_text(remark.remedy)}</p></li>"
    )
