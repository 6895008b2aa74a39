"""Reconstructions spoilt on purpose: cut, scaled, turned. Tables are SWC rows (n, 7)."""

from __future__ import annotations

import warnings
from pathlib import Path

import numpy as np
from builders_morphology import read_table, write_table

ROOT = Path(__file__).parent.parent
STAND_INS = sorted((ROOT / "morphologies").glob("*.swc"))
# Unit of the five real neurons that the library navis ships, in micrometres.
REAL_UNIT_UM = 0.008


def real_files():
    """Return the five real reconstructions (fly neurons) that ship with navis."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import navis
    return sorted((Path(navis.__file__).parent / "data" / "swc").glob("*.swc"))


def stand_in(name):
    """Return the table of a stand-in."""
    return read_table(ROOT / "morphologies" / f"{name}.swc")


def scaled(table, x=1.0, y=1.0, z=1.0, radius=1.0):
    """Scale coordinates and radii."""
    return table * np.array([1, 1, x, y, z, radius, 1])


def turned(table, order, signs=(1, 1, 1)):
    """Turn by right angles: the new x, y and z are old axes, with signs."""
    out = table.copy()
    out[:, 2:5] = table[:, 2:5][:, order] * signs
    return out


def cut(table, normal, distance_um, *, on_plane=True):
    """Cut off what lies beyond a plane, seen from the first sample.

    With `on_plane` the severed branches end on it, else at the last whole sample.
    """
    normal = np.array(normal, float) / np.linalg.norm(normal)
    height = (table[:, 2:5] - table[0, 2:5]) @ normal
    place = {int(number): row for row, number in enumerate(table[:, 0])}
    kept, rows = {}, []
    for row, values in enumerate(table):
        above = place.get(int(values[6]))
        if above is None or (kept.get(above) and height[row] <= distance_um):
            kept[row] = True
            rows.append(values)
        elif kept.get(above) and on_plane and height[above] < distance_um:
            part = (distance_um - height[above]) / (height[row] - height[above])
            end = values.copy()
            end[2:5] = table[above, 2:5] + part * (values[2:5] - table[above, 2:5])
            rows.append(end)
    return np.array(rows)


def codes(sheet, *severities):
    """Return the codes of the remarks of some severities."""
    return {r.code for r in sheet.remarks if r.severity in severities}


def inspected(folder, table, upright="y"):
    """Write a table as a file and inspect it."""
    from circuitgen.inspection import inspect_file

    return inspect_file(write_table(folder / "cell.swc", table), upright)
