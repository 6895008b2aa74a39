"""The inspection on a terminal: 80 columns, no colour, right in a log file, too."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence

from circuitgen.inspection.remarks import SEVERITIES, Remark, printable
from circuitgen.inspection.sheet import Sheet

WIDTH = 80
REFUSALS_SHOWN = 3
_NAME = 17
_WIDTHS = (5, 5, 6, 17, 4, 6, 5, 5)
_HEAD = (
    ("", "axon", "basal", "apical", "extent", "tips", "branch", "path", "rad."),
    ("file", "mm", "mm", "mm", "x, y, z um", "", "points", "um", "um"),
)
_MARKS = "X: cannot be used. !: has warnings. rad.: median radius."


def table_text(sheets: Sequence[Sheet]) -> str:
    """Lay out the numbers of all files, then what is to be said of them."""
    rows = [_row(sheet) for sheet in sheets if sheet.measures]
    head = [_line(" ", name, cells) for name, *cells in _HEAD]
    parts = ["\n".join([*head, *rows, _MARKS])] if rows else []
    parts += [_said(sheet) for sheet in sheets if sheet.remarks]
    parts.append(_summary(sheets))
    return "\n\n".join(parts)


def shortened(name: str, width: int) -> str:
    """Shorten a name in its middle; characters that do not print become ``?``."""
    name = printable(name)
    if len(name) <= width:
        return name
    begin = (width - 3) // 2
    return f"{name[:begin]}...{name[len(name) - (width - 3 - begin) :]}"


def _number(value: float, width: int, digits: int) -> str:
    """Write a number in a width, in powers of ten if it does not fit."""
    text = f"{value:{width}.{digits}f}"
    return text if len(text) <= width else f"{value:.0e}".rjust(width)


def _row(sheet: Sheet) -> str:
    m = sheet.measures
    mark = "X" if not sheet.usable else "!" if sheet.number_of("warning") else " "
    extent = " x ".join(f"{value:.0f}" for value in m.extent_um)
    if len(extent) > 17:
        extent = " ".join(f"{value:.0e}" for value in m.extent_um)
    path = max(m.longest_axon_path_um, m.longest_dendrite_path_um)
    cells = [_number(um / 1000, 5, 1) for um in (m.axon_um, m.basal_um, m.apical_um)]
    cells += [extent, str(m.axon_tips_n + m.dendrite_tips_n), str(m.branch_points_n)]
    cells += [_number(path, 5, 0), _number(m.radius_um[0], 5, 2)]
    return _line(mark, sheet.path.name, cells)


def _line(mark: str, name: str, cells: Sequence[str]) -> str:
    padded = [cell.rjust(width) for cell, width in zip(cells, _WIDTHS, strict=True)]
    return f"{mark} {shortened(name, _NAME):<{_NAME}} {' '.join(padded)}"


def _said(sheet: Sheet) -> str:
    """Tell the remarks on one file."""
    lines = [shortened(str(sheet.path), WIDTH)]
    refused = [r for r in sheet.remarks if r.code == "refused"]
    for remark in refused[:REFUSALS_SHOWN]:
        lines += _wrapped(f"blocks: {remark.seen}", 2)
    if len(refused) > REFUSALS_SHOWN:
        lines.append(f"  ... and {len(refused) - REFUSALS_SHOWN} problems more")
    for remark in sheet.remarks:
        if remark.code != "refused":
            lines += _told(remark)
    return "\n".join(lines)


def _told(remark: Remark) -> list[str]:
    line = f" (from line {remark.line})" if remark.line else ""
    lines = _wrapped(f"{remark.severity}: {remark.seen}{line}", 2)
    if remark.severity in ("blocks", "warning"):
        lines += _wrapped(f"-> {remark.effect}", 6)
        lines += _wrapped(f"do: {remark.remedy}", 6)
    return lines


def _wrapped(text: str, indent: int) -> list[str]:
    blank = " " * indent
    return textwrap.wrap(
        printable(text), WIDTH, initial_indent=blank, subsequent_indent=f"{blank}    "
    )


def _summary(sheets: Sequence[Sheet]) -> str:
    usable = sum(sheet.usable for sheet in sheets)
    counts = [
        f"{name} {sum(sheet.number_of(name) for sheet in sheets)}" for name in SEVERITIES
    ]
    counts = ", ".join(counts)
    return f"{usable} of {len(sheets)} files can be used; findings: {counts}."
