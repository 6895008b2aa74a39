"""Small pieces of the page: escaped text, numbers, the plot of one recording."""

from __future__ import annotations

import html
import json


def text(value: object) -> str:
    """Escape anything for HTML, as text or in a quoted attribute."""
    return html.escape("" if value is None else str(value), quote=True)


def number(value: float | None, digits: int = 3) -> str:
    """Write a number with `digits` significant digits, no exponent; a dash for None."""
    if value is None:
        return "–"
    if isinstance(value, int):
        return f"{value:,}"
    if value == 0:
        return "0"
    rounded = float(f"{value:.{digits}g}")
    if abs(rounded) >= 1000:
        return f"{rounded:,.0f}"
    return f"{rounded:.12f}".rstrip("0").rstrip(".")


def embedded_json(data: object) -> str:
    """Write data as JSON that no text in it can break out of a script element."""
    raw = json.dumps(data, ensure_ascii=True, separators=(",", ":"), allow_nan=False)
    for mark in "<>&":
        raw = raw.replace(mark, f"\\u{ord(mark):04x}")
    return raw


def axis_end(values: list[float | None]) -> float:
    """Return a round end of an axis from 0 that holds all probabilities."""
    most = max((v for v in values if v is not None), default=1.0)
    return next((end for end in (0.1, 0.2, 0.4, 0.6, 0.8) if most <= end), 1.0)


def axis_ticks(end: float) -> str:
    """Draw the numbers of the axis above the plots of the recordings."""
    marks = []
    for step in range(5):
        anchor = ("start", "middle", "middle", "middle", "end")[step]
        marks.append(
            f'<text x="{25 * step}%" y="11" text-anchor="{anchor}">'
            f"{number(end * step / 4)}</text>"
        )
    return f'<svg class="ticks" aria-hidden="true">{"".join(marks)}</svg>'


def recording_plot(row: dict, end: float, tone: str, label: str) -> str:
    """Draw one recording: interval and measured point, the circuit's as a diamond."""

    def at(value: float) -> str:
        return f"{100 * min(value / end, 1):.2f}%"

    marks = [
        f'<line class="grid" x1="{25 * s}%" x2="{25 * s}%" y1="0" y2="36"/>'
        for s in range(5)
    ]
    low, high = row["p_measured_low"], row["p_measured_high"]
    if low is not None and high is not None:
        width = f"{100 * (min(high / end, 1) - low / end):.2f}%"
        marks.append(
            f'<rect class="tint" x="{at(low)}" y="7" width="{width}" height="10"/>'
        )
        marks += [
            f'<line class="ink" x1="{at(v)}" x2="{at(v)}" y1="5" y2="19"/>'
            for v in (low, high)
        ]
        marks.append(
            f'<line class="ink" x1="{at(low)}" x2="{at(high)}" y1="12" y2="12"/>'
        )
    if row["p_measured"] is not None:
        marks.append(f'<circle class="ink" cx="{at(row["p_measured"])}" cy="12" r="4"/>')
    if row["p_realised"] is not None:
        marks.append(
            f'<svg x="{at(row["p_realised"])}" y="26" overflow="visible">'
            f'<path class="circuit {tone}" d="M0-7 7 0 0 7-7 0Z"/></svg>'
        )
    head = f'<svg class="whisker" role="img" aria-label="{text(label)}">'
    return f"{head}{''.join(marks)}</svg>"
