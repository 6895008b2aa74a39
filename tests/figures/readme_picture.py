"""Draw the README's picture from a finished run: ``readme_picture.py RUN OUT.png``.

Left, the column from the side with a few whole cells in place; right, every recording
with its 95 % interval beside the fitted and the realised probability. Needs matplotlib.
"""

from __future__ import annotations

import sys
from pathlib import Path

import matplotlib as mpl
import numpy as np
import pandas as pd

mpl.use("Agg")
import matplotlib.pyplot as plt
from matplotlib.collections import LineCollection

from circuitgen.morphology import Kind, build_arbor, read_reconstruction

MORPHOLOGIES = Path(__file__).parent.parent.parent / "morphologies"
SIGN_COLOURS = {"excitatory": "#C98A00", "inhibitory": "#2F6F7E"}
AXON, DENDRITE, INK, BRICK = "#7A4E8A", "#6B7F3A", "#222222", "#B5482F"
SHOWN_TYPES = ("L23_pyramidal", "L5_thick", "L4_basket")


def draw_cell(axes, cell) -> None:
    """Draw one whole cell where it stands."""
    source = MORPHOLOGIES / f"{cell.morphology}.swc"
    arbor = build_arbor(
        read_reconstruction(source), upright="y", min_spacing_um=8.0, ais_um=0.0
    )
    angle = np.deg2rad(cell.azimuth_deg)
    ends = [
        np.column_stack(
            [
                np.cos(angle) * part[:, 0] - np.sin(angle) * part[:, 1] + cell.x_um,
                cell.depth_um - part[:, 2],
            ]
        )
        for part in (arbor.start_um, arbor.end_um)
    ]
    for axon, colour, width in ((True, AXON, 0.5), (False, DENDRITE, 1.0)):
        chosen = (arbor.kind == Kind.AXON) == axon
        lines = np.stack([end[chosen] for end in ends], axis=1)
        axes.add_collection(LineCollection(lines, colors=colour, linewidths=width))


def draw_column(axes, cells) -> None:
    """Draw somata by depth and a few whole cells."""
    for name in SHOWN_TYPES:
        own = cells[cells.cell_type == name]
        middle = (own.x_um.abs() + (own.depth_um - own.depth_um.median()).abs()).idxmin()
        draw_cell(axes, own.loc[middle])
    for sign, colour in SIGN_COLOURS.items():
        own = cells[cells.sign == sign]
        axes.scatter(own.x_um, own.depth_um, s=5, color=colour, label=sign, zorder=3)
    axes.plot([], [], color=AXON, label="axon (3 cells)")
    axes.plot([], [], color=DENDRITE, label="dendrite")
    axes.set(xlabel="x, um", ylabel="depth below the pia, um", aspect="equal")
    axes.set(xlim=(-330, 330), ylim=(1640, -40))
    axes.legend(loc="upper center", bbox_to_anchor=(0.5, -0.06), ncol=2, frameon=False)


def draw_recordings(axes, fit) -> None:
    """Draw measured, fitted and realised probabilities, one recording a row."""
    rows = np.arange(len(fit))
    whiskers = np.array(
        [fit.p_measured - fit.p_measured_low, fit.p_measured_high - fit.p_measured]
    )
    axes.errorbar(
        fit.p_measured, rows, xerr=whiskers, fmt="o", color=INK, ms=4, lw=1,
        label="measured, 95 %",
    )  # fmt: skip
    axes.plot(fit.p_fitted, rows, "|", color=BRICK, ms=11, mew=2, label="fitted")
    axes.plot(
        fit.p_realised, rows, "x", color=SIGN_COLOURS["inhibitory"], ms=6,
        label="drawn circuit",
    )  # fmt: skip
    names = [
        f"{row.pre_type} to {row.post_type}"
        + (" (kept out)" if row.use == "audit" else "")
        for row in fit.itertuples()
    ]
    axes.set_yticks(rows, names, fontsize=8)
    axes.set(xlabel="connection probability in the row's window", xlim=(0, 0.85))
    axes.set_ylim(len(fit) - 0.4, -0.6)
    axes.legend(loc="upper center", bbox_to_anchor=(0.5, -0.06), ncol=3, frameon=False)


def main(run: Path, out: Path) -> None:
    """Draw both panels into one file."""
    cells = pd.read_parquet(run / "cells.parquet")
    fit = pd.read_csv(run / "fit.csv")
    figure, axes = plt.subplots(
        1, 2, figsize=(12, 9), width_ratios=[1, 1.25], layout="constrained"
    )
    draw_column(axes[0], cells)
    draw_recordings(axes[1], fit)
    figure.savefig(out, dpi=110)


if __name__ == "__main__":
    main(Path(sys.argv[1]), Path(sys.argv[2]))
