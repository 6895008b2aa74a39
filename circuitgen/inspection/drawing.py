"""Arbors as inline SVG: from the side and from above, at one scale."""

from __future__ import annotations

from dataclasses import dataclass
from html import escape

import numpy as np

from circuitgen.inspection.checks import AXIS_NAMES, up_vector
from circuitgen.inspection.remarks import printable
from circuitgen.morphology.arbor import Arbor, Kind

WIDEST_PX, HIGHEST_PX = 300.0, 420.0
# Whole units of a drawing per pixel, and how far apart points are kept.
UNITS_PER_PX = 4
_APART_UNITS = 5.0
_MARGIN_PX = 10.0
_NARROWEST_PX = 110.0
_BAR_PX = 30.0


@dataclass(frozen=True)
class View:
    """One drawing: what is across, what is up, and the words for it."""

    across: np.ndarray
    up: np.ndarray
    words: str


def views(upright: str) -> tuple[View, View]:
    """Return the views from the side and from above for an axis toward the pia."""
    axis = AXIS_NAMES.index(upright[-1])
    one, other = (i for i in range(3) if i != axis)
    basis = np.eye(3)
    sideways, depth = AXIS_NAMES[one], AXIS_NAMES[other]
    side = View(basis[one], up_vector(upright), f"From the side: {upright} up")
    above = View(basis[one], basis[other], f"From above: {sideways} across, {depth} up")
    return side, above


def drawings(arbor: Arbor, upright: str, name: str) -> list[tuple[str, str]]:
    """Draw an arbor twice.

    Parameters
    ----------
    arbor : Arbor
        With its file's own axes.
    upright : str
        The axis toward the pia.
    name : str
        Used in the text alternative; escaped here.

    Returns
    -------
    list of (svg, caption)
    """
    extent = np.ptp(np.vstack([arbor.start_um, arbor.end_um]), axis=0)
    both = views(upright)
    across = max(float(np.abs(view.across) @ extent) for view in both) or 1.0
    high = max(float(np.abs(view.up) @ extent) for view in both) or 1.0
    scale = UNITS_PER_PX * min(WIDEST_PX / across, HIGHEST_PX / high)
    return [
        (_svg(arbor, view, scale, f"{name}. {view.words}"), view.words) for view in both
    ]


def _svg(arbor: Arbor, view: View, scale: float, words: str) -> str:
    """Draw one view; `scale` is in units per micrometre."""
    frame = np.column_stack([view.across, -view.up]) * scale
    start, end = arbor.start_um @ frame, arbor.end_um @ frame
    low = np.minimum(start.min(axis=0), end.min(axis=0))
    high = np.maximum(start.max(axis=0), end.max(axis=0))
    margin, narrowest = _MARGIN_PX * UNITS_PER_PX, _NARROWEST_PX * UNITS_PER_PX
    spare = max(narrowest - (high[0] - low[0]), 0.0) / 2
    left, top = low[0] - margin - spare, low[1] - margin
    width = high[0] - low[0] + 2 * (margin + spare)
    height = high[1] - low[1] + 2 * margin
    bar = _bar(left + margin, top + height, width - 2 * margin, scale)
    height += _BAR_PX * UNITS_PER_PX
    box = f"{left:.0f} {top:.0f} {width:.0f} {height:.0f}"
    size = f'width="{width / UNITS_PER_PX:.0f}" height="{height / UNITS_PER_PX:.0f}"'
    neurite = arbor.kind != Kind.SOMA
    axon = arbor.kind == Kind.AXON
    body = [
        f'<path class="{name}" d="{_path(arbor, start, end, rows)}"/>'
        for name, rows in (("axon", axon), ("dendrite", neurite & ~axon))
        if rows.any()
    ]
    body.append(f'<path class="soma" d="{_soma(arbor, start, end, scale)}"/>')
    label = escape(printable(words), quote=True)
    opening = f'<svg role="img" aria-label="{label}" viewBox="{box}" {size}>'
    return f"{opening}{''.join(body)}{bar}</svg>"


def _path(arbor: Arbor, start: np.ndarray, end: np.ndarray, rows: np.ndarray) -> str:
    """Write segments as polylines of whole units, points closer together left out."""
    drawn, here, waiting = [], (None, None), None
    end, start = np.rint(end).astype(int).tolist(), np.rint(start).astype(int).tolist()
    parent, before, last = arbor.parent.tolist(), -2, None
    for row in np.flatnonzero(rows).tolist():
        if parent[row] != before or start[row] != last:
            if waiting:
                drawn.append(_step(here, waiting))
            here, waiting = start[row], None
            drawn.append(f"M{here[0]} {here[1]}l")
        before, last = row, end[row]
        x, y = last[0] - here[0], last[1] - here[1]
        if x * x + y * y >= _APART_UNITS**2:
            drawn.append(_step(here, last))
            here, waiting = last, None
        else:
            waiting = last
    if waiting:
        drawn.append(_step(here, waiting))
    return "".join(drawn).replace("l ", "l").replace(" -", "-")


def _step(here: list[int], there: list[int]) -> str:
    return f" {there[0] - here[0]} {there[1] - here[1]}"


def _soma(arbor: Arbor, start: np.ndarray, end: np.ndarray, scale: float) -> str:
    """Write the soma as discs around the ends of its capsules, at least 5 px wide."""
    rows = arbor.kind == Kind.SOMA
    places = np.vstack([start[rows], end[rows]])
    radii = np.hstack([arbor.start_radius_um[rows], arbor.end_radius_um[rows]]) * scale
    discs = np.unique(
        np.rint(np.column_stack([places, np.maximum(radii, 2.5 * UNITS_PER_PX)])), axis=0
    )
    return "".join(
        f"M{x - r:.0f} {y:.0f}a{r:.0f} {r:.0f} 0 1 0 {2 * r:.0f} 0"
        f"a{r:.0f} {r:.0f} 0 1 0 {-2 * r:.0f} 0z"
        for x, y, r in discs.tolist()
    )


def _bar(left: float, top: float, room: float, scale: float) -> str:
    """Draw a scale bar of 1, 2 or 5 times a power of ten, at most 60 % of the room."""
    most = 0.6 * room / scale
    power = 10.0 ** np.floor(np.log10(most))
    length = max(step * power for step in (1, 2, 5) if step * power <= most)
    y, end = top + 4 * UNITS_PER_PX, left + length * scale
    text = f"{length:g} µm"
    return (
        f'<path class="bar" d="M{left:.0f} {y:.0f}H{end:.0f}"/>'
        f'<text x="{left:.0f}" y="{y + 17 * UNITS_PER_PX:.0f}">{text}</text>'
    )
