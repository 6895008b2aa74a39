"""The column from the side: somata, density by depth, whole cells."""

from __future__ import annotations

import numpy as np

from circuitgen.report.drawing import ArborShelf, drawn_cell
from circuitgen.report.source import RunTables
from circuitgen.report.totals import thickness_um

MOST_SOMATA = 6000
PROFILE_BIN_UM = 50.0


def somata(run: RunTables) -> dict:
    """Return somata from the side, whole micrometres, evenly thinned when many."""
    cells = run.cells
    step = -(-cells.type_index.size // MOST_SOMATA)
    flat = np.column_stack([cells.position_um[:, 0], cells.depth_um])
    flat = np.rint(flat).astype(int)
    return {
        "step": step,
        "points": [
            flat[cells.type_index == index][::step].ravel().tolist()
            for index in range(len(run.type_names))
        ],
    }


def cross_section_mm2(run: RunTables) -> float | None:
    """Return the column's area seen from the pia; None for a mesh."""
    column = run.spec["column"]
    if column["shape"] == "cylinder":
        area = np.pi / 4 * column["diameter_um"] ** 2
    elif column["shape"] == "hexagon":
        area = np.sqrt(3) / 2 * column["across_flats_um"] ** 2
    elif column["shape"] == "box":
        area = column["width_um"] * column["length_um"]
    else:
        return None
    return float(area) / 1e6


def profile(run: RunTables) -> dict:
    """Return somata by type and depth, and what the spec asks for in each layer.

    Densities per mm3 where the area is known, cells per bin elsewhere.
    """
    depth, area = thickness_um(run), cross_section_mm2(run)
    edges = np.append(np.arange(0, depth - 1e-9, PROFILE_BIN_UM), depth)
    slab_mm3 = None if area is None else area * np.diff(edges) / 1e3
    layers, top = [], 0.0
    for layer in run.spec["layers"]:
        bottom = top + layer["thickness_um"]
        layers.append({"name": str(layer["name"]), "top": top, "bottom": bottom})
        top = bottom
    built, wanted = [], []
    for index, name in enumerate(run.type_names):
        own = run.cells.depth_um[run.cells.type_index == index]
        counts = np.histogram(own, edges)[0]
        values = counts if area is None else counts / slab_mm3
        built.append([float(f"{value:.4g}") for value in values])
        wanted.append(_wanted(run.spec["cell_types"][name], layers, area))
    return {
        "edges": edges.tolist(),
        "layers": layers,
        "per_mm3": area is not None,
        "built": built,
        "wanted": wanted,
    }


def _wanted(entry: dict, layers: list[dict], area: float | None) -> list:
    """Return what the spec asks of a type in each layer; None where it says nothing."""
    out = []
    for layer in layers:
        density = (entry.get("density_per_mm3") or {}).get(layer["name"])
        count = (entry.get("count") or {}).get(layer["name"])
        if density is None and count is not None and area is not None:
            density = count / (area * (layer["bottom"] - layer["top"]) / 1e3)
        out.append(None if density is None or area is None else float(density))
    return out


def shown_cells(run: RunTables, shelf: ArborShelf) -> list[dict]:
    """Return up to four whole cells in place, each the nearest of its type to the axis.

    The most numerous excitatory type of each of up to three layers, from the top, and
    the most numerous inhibitory type.
    """
    cells = run.cells
    counts = np.bincount(cells.type_index, minlength=len(run.type_names))
    depth = [
        float(cells.depth_um[cells.type_index == t].mean()) if counts[t] else np.inf
        for t in range(len(run.type_names))
    ]
    bounds = np.cumsum([layer["thickness_um"] for layer in run.spec["layers"]])
    best: dict[tuple[bool, int], int] = {}
    for t in np.argsort(-counts, kind="stable").tolist():
        if counts[t]:
            sign = bool(run.is_excitatory[t])
            key = (sign, int(np.searchsorted(bounds, depth[t])) if sign else 0)
            best.setdefault(key, t)
    # Types came in order of their number of cells, and so do the keys.
    chosen = [t for (sign, _), t in best.items() if sign][:3]
    chosen += [t for (sign, _), t in best.items() if not sign]
    middle = cells.position_um[:, :2].mean(axis=0)
    off = np.linalg.norm(cells.position_um[:, :2] - middle, axis=1)
    out = []
    for t in sorted(chosen, key=lambda t: depth[t]):
        own = np.flatnonzero(cells.type_index == t)
        drawn = drawn_cell(run, shelf, int(own[off[own].argmin()]))
        if drawn:
            out.append(drawn)
    return out
