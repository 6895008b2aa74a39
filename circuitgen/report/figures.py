"""The figures of the report as files, SVG and PNG, through matplotlib."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from pathlib import Path

import numpy as np

from circuitgen.core.files import whole_file

PNG_DOTS_PER_INCH = 300
_EXC, _INH, _INK, _SOFT = "#C98A00", "#2F6F7E", "#222222", "#8A867C"
_AXON, _DENDRITE, _BRICK = "#7A4E8A", "#6B7F3A", "#B5482F"
# Names of types are text, never formulas; the same content gives the same file.
_STYLE = {
    "font.size": 8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "text.parse_math": False,
    "svg.hashsalt": "circuitgen",
}


def _colour(kind: dict) -> str:
    return _EXC if kind["excitatory"] else _INH


def _short(name: str, most: int = 24) -> str:
    return name if len(name) <= most else name[: most - 1] + "…"


def draw_figures(content: dict, folder: Path) -> list[Path]:
    """Draw every figure that the content has data for; return the files."""
    import matplotlib as mpl
    from matplotlib.figure import Figure

    drawings: dict[str, tuple[tuple[float, float], Callable]] = {
        "recordings": ((7.0, 1.0 + 0.24 * len(content["recordings"])), _recordings),
        "pathways": ((7.0, 6.4), _matrix),
        "curves": ((7.0, 4.0), _curves),
        "column": ((4.5, 7.0), _column),
        "density": ((7.0, 4.5), _density),
        "degrees": ((7.0, 2.8), _degrees),
        "depths": ((4.5, 4.0), _depths),
        "pair": ((4.5, 6.0), _pair),
    }
    files = []
    with mpl.rc_context(_STYLE), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing from font")
        for name, (size, draw) in drawings.items():
            figure = Figure(figsize=size, layout="constrained")
            if not draw(figure, content):
                continue
            for ending, options in (("svg", {"Date": None}), ("png", {})):
                path = folder / f"{name}.{ending}"
                with whole_file(path) as partial:
                    figure.savefig(
                        partial, format=ending, metadata=options, dpi=PNG_DOTS_PER_INCH
                    )
                files.append(path)
    return files


def _recordings(figure, content: dict) -> bool:
    rows = content["recordings"]
    if not rows:
        return False
    signs = {kind["name"]: kind for kind in content["types"]}
    axes = figure.subplots()
    for place, row in enumerate(rows):
        low, high = row["p_measured_low"], row["p_measured_high"]
        if low is not None:
            axes.plot([low, high], [place, place], color=_INK, lw=5, alpha=0.25)
            axes.plot([low, high], [place, place], color=_INK, lw=1)
        if row["p_measured"] is not None:
            axes.plot(row["p_measured"], place, "o", color=_INK, ms=4)
        if row["p_realised"] is not None:
            kind = signs.get(row["pre_type"])
            tone = _colour(kind) if kind else _SOFT
            axes.plot(row["p_realised"], place + 0.3, "D", color=tone, ms=4)
        if row["verdict"] in ("too high", "too low"):
            axes.text(1.01, place, row["verdict"], color=_BRICK, va="center",
                      transform=axes.get_yaxis_transform())  # fmt: skip
    names = [f"{_short(r['pre_type'])} → {_short(r['post_type'])}" for r in rows]
    axes.set_yticks(range(len(rows)), names)
    axes.set_ylim(len(rows) - 0.4, -0.8)
    axes.set_xlim(left=0)
    axes.set_xlabel(
        "connection probability: point and bar, measured with 95 % interval;"
        " diamond, circuit"
    )
    return True


def _matrix(figure, content: dict) -> bool:
    from matplotlib.patches import Rectangle

    names = [kind["name"] for kind in content["types"]]
    place = {name: index for index, name in enumerate(names)}
    p = np.full((len(names), len(names)), np.nan)
    axes = figure.subplots()
    for row in content["pathways"]:
        i, j = place[row["pre_type"]], place[row["post_type"]]
        p[i, j] = np.nan if row["p_connect"] is None else row["p_connect"]
        if row["p_connect_low"] is not None and row["p_connect_high"] is not None:
            width = 0.8 * (row["p_connect_high"] - row["p_connect_low"])
            axes.add_patch(Rectangle((j - 0.42, i + 0.22), 0.84, 0.22, color="white"))
            axes.add_patch(Rectangle((j - 0.4, i + 0.27), width, 0.12, color=_INK))
        if row["recorded"]:
            box = Rectangle((j - 0.45, i - 0.45), 0.9, 0.9, fill=False, ec=_INK, lw=1.2)
            axes.add_patch(box)
    shown = axes.imshow(p, cmap="cividis", norm=_root_norm(p))
    axes.set_facecolor("#E6E1D5")
    short = [_short(name) for name in names]
    axes.set_xticks(range(len(names)), short, rotation=90)
    axes.set_yticks(range(len(names)), short)
    axes.set_xlabel("postsynaptic; bar: width of the interval; outline: recorded")
    axes.set_ylabel("presynaptic")
    figure.colorbar(shown, ax=axes, shrink=0.6, label="connection probability")
    return True


def _root_norm(p: np.ndarray):
    from matplotlib.colors import PowerNorm

    known = p[~np.isnan(p)]
    return PowerNorm(0.5, vmin=0, vmax=max(known.max(initial=0.0), 1e-6))


def _curves(figure, content: dict) -> bool:
    """Draw the probability by distance of every recorded pathway."""
    types, details = content["types"], content["details"]
    place = {kind["name"]: index for index, kind in enumerate(types)}
    chosen = []
    for row in content["pathways"]:
        code = place[row["pre_type"]] * len(types) + place[row["post_type"]]
        curve = details.get(str(code), {}).get("curve")
        if row["recorded"] and curve:
            chosen.append((row, curve))
    if not chosen:
        return False
    rows = -(-len(chosen) // 4)
    figure.set_figheight(0.6 + 1.4 * rows)
    plots = figure.subplots(rows, 4, squeeze=False, sharex=True).ravel()
    for axes, (row, curve) in zip(plots, chosen, strict=False):
        tone = _colour(types[place[row["pre_type"]]])
        bins = curve["first"] + np.arange(len(curve["n"]))
        middle = (bins + 0.5) * content["bin_um"]
        if "low" in curve:
            low, high = (np.array(curve[k], float) for k in ("low", "high"))
            axes.fill_between(middle, low, high, color=tone, alpha=0.25, lw=0)
        axes.plot(middle, np.array(curve["p"], float), color=tone, lw=1.2)
        axes.set_ylim(bottom=0)
        names = f"{_short(row['pre_type'], 18)}\n→ {_short(row['post_type'], 18)}"
        axes.set_title(names, fontsize=7)
    for axes in plots[len(chosen) :]:
        axes.set_axis_off()
    figure.supxlabel("distance of the somata (µm)")
    figure.supylabel("connection probability")
    return True


def _lines(axes, cell: dict, thickness: float | None, kinds, colour, width) -> None:
    from matplotlib.collections import LineCollection

    lines = []
    for kind, flat in cell["lines"]:
        if kind in kinds:
            x, _, z = np.array(flat, float).reshape(-1, 3).T
            lines.append(np.column_stack([x, z if thickness is None else thickness - z]))
    axes.add_collection(LineCollection(lines, colors=colour, linewidths=width))


def _column(figure, content: dict) -> bool:
    axes, thickness = figure.subplots(), content["thickness_um"]
    for kind, flat in zip(content["types"], content["somata"]["points"], strict=True):
        x, depth = np.array(flat, float).reshape(-1, 2).T
        marker = "o" if kind["excitatory"] else "^"
        axes.scatter(x, depth, s=2, color=_colour(kind), marker=marker, lw=0, alpha=0.6)
    for cell in content["shown_cells"]:
        _lines(axes, cell, thickness, (2,), _AXON, 0.4)
        _lines(axes, cell, thickness, (3, 4), _DENDRITE, 0.8)
    for layer in content["profile"]["layers"]:
        axes.axhline(layer["top"], color=_SOFT, lw=0.4)
        place = (0.01, (layer["top"] + layer["bottom"]) / 2)
        name = _short(layer["name"], 12)
        axes.annotate(name, place, xycoords=("axes fraction", "data"), va="center")
    axes.autoscale_view()
    axes.set_aspect("equal")
    axes.invert_yaxis()
    axes.set_xlabel("x (µm)")
    axes.set_ylabel("depth below the pia (µm)")
    return True


def _density(figure, content: dict) -> bool:
    profile, types = content["profile"], content["types"]
    columns = min(len(types), 8)
    rows = -(-len(types) // columns)
    plots = figure.subplots(rows, columns, squeeze=False, sharey=True).ravel()
    edges = np.array(profile["edges"])
    for axes, kind, built, wanted in zip(
        plots, types, profile["built"], profile["wanted"], strict=False
    ):
        axes.barh(edges[:-1], built, np.diff(edges), align="edge", color=_colour(kind))
        for layer, value in zip(profile["layers"], wanted, strict=True):
            if value is not None:
                y = [layer["top"], layer["top"], layer["bottom"], layer["bottom"]]
                axes.plot([0, value, value, 0], y, color=_INK, lw=1)
        axes.set_title(_short(kind["name"], 16), fontsize=7)
        axes.ticklabel_format(axis="x", scilimits=(0, 0))
    for axes in plots[len(types) :]:
        axes.set_axis_off()
    plots[0].set_ylim(content["thickness_um"], 0)
    unit = "cells per mm³" if profile["per_mm3"] else "cells per bin"
    figure.supxlabel(f"{unit}; bars: built, line: spec")
    figure.supylabel("depth (µm)")
    return True


def _degrees(figure, content: dict) -> bool:
    degrees = content["degrees"]
    words = {"out": "partners that a cell reaches", "in": "partners that reach a cell"}
    for axes, (key, label) in zip(figure.subplots(1, 2), words.items(), strict=True):
        excitatory, inhibitory = degrees[key]
        width = degrees["bin"]
        axes.bar(np.arange(len(excitatory)) * width, excitatory, width, align="edge",
                 color=_EXC, label="excitatory")  # fmt: skip
        edges = np.arange(len(inhibitory) + 1) * width
        if inhibitory:
            axes.stairs(inhibitory, edges, color=_INH, lw=1.5, label="inhibitory")
        axes.set_xlabel(label)
        axes.set_ylabel("cells")
        axes.legend(frameon=False)
    return True


def _depths(figure, content: dict) -> bool:
    from matplotlib.colors import LogNorm

    counts = np.array(content["by_depth"], float)
    if not counts.any():
        return False
    axes, depth = figure.subplots(), content["thickness_um"]
    counts[counts == 0] = np.nan
    norm = LogNorm(1, max(np.nanmax(counts), 2))
    extent = (0, depth, depth, 0)
    shown = axes.imshow(counts, cmap="cividis", norm=norm, extent=extent)
    axes.set_xlabel("depth of the dendrite's soma (µm)")
    axes.set_ylabel("depth of the axon's soma (µm)")
    bar = figure.colorbar(
        shown, ax=axes, shrink=0.8, label="appositions", format=lambda v, _: f"{v:,.0f}"
    )
    bar.ax.minorticks_off()
    return True


def _pair(figure, content: dict) -> bool:
    if not content["shown_pairs"]:
        return False
    pair, axes = content["shown_pairs"][0], figure.subplots()
    types = content["types"]
    _lines(axes, pair["pre"], None, (3, 4), "#C9CFB4", 0.6)
    _lines(axes, pair["post"], None, (3, 4), _DENDRITE, 1.1)
    _lines(axes, pair["pre"], None, (2,), _AXON, 0.6)
    for cell in (pair["pre"], pair["post"]):
        axes.plot(cell["soma"][0], cell["soma"][2], "o", mec=_INK,
                  mfc=_colour(types[cell["type"]]), ms=6)  # fmt: skip
    for synapse in pair["synapses"]:
        axes.plot(synapse["at"][0], synapse["at"][2], "s", color=_BRICK, mec="w", ms=5)
    axes.autoscale_view()
    axes.set_aspect("equal")
    names = [_short(types[pair[side]["type"]]["name"]) for side in ("pre", "post")]
    axes.set_title(f"{names[0]} → {names[1]}")
    axes.set_xlabel("x (µm)")
    axes.set_ylabel("height above the white matter (µm)")
    return True
