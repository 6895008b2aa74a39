"""Mended files: what the reader repaired, written so that nothing is left to repair.

The reader joins loose pieces across gaps and keeps the gaps free of cable. SWC cannot
say that, so in a mended file a gap is cable, and the header says how much. Where an
outline became a sphere, neurites begin at its middle.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np

from circuitgen import __version__
from circuitgen.core.errors import InputError, Problem
from circuitgen.core.files import sha256_of
from circuitgen.inspection.remarks import printable
from circuitgen.inspection.sheet import Sheet
from circuitgen.morphology import Reconstruction, write_swc
from circuitgen.morphology.arbor import Kind

# Warnings of the reader that change what a file holds, beside all repairs.
_CHANGES = {"soma_made", "soma_apart", "soma_radius", "loose_dropped"}
_WRITTEN_UM = 0.001


def needs_mending(sheet: Sheet) -> bool:
    """Tell whether the reader changed anything in a file that it could read."""
    return sheet.reconstruction is not None and bool(_changes(sheet))


def _changes(sheet: Sheet) -> list[str]:
    return [
        f"{remark.seen} (from line {remark.line})" if remark.line else remark.seen
        for remark in sheet.remarks
        if remark.severity == "repair" or remark.code in _CHANGES
    ]


def mend_files(sheets: list[Sheet], folder: Path) -> list[Path]:
    """Write the mended form of every file that needs it into a folder.

    Returns
    -------
    list of Path
        The files written, with the names of the originals.

    Raises
    ------
    InputError
        If a file of that name is there already or two files share a name; then nothing
        is written. If the folder cannot be written to.
    """
    sheets = [sheet for sheet in sheets if needs_mending(sheet)]
    targets = [Path(folder) / sheet.path.name for sheet in sheets]
    problems = []
    for place, target in enumerate(targets):
        if target.exists() or target.is_symlink():
            rule = "exists already; mended files overwrite nothing, name another folder"
            problems.append(Problem(str(target), None, "", rule))
        elif target in targets[:place]:
            rule = f"would hold two files of the name {target.name}; mend them apart"
            problems.append(Problem(str(target), None, "", rule))
    if problems:
        raise InputError(problems)
    for sheet, target in zip(sheets, targets, strict=True):
        try:
            _write(sheet, target)
        except OSError as error:
            rule = f"cannot be written: {error.strerror or error}"
            raise InputError([Problem(str(target), None, "", rule)]) from None
    return targets


def _write(sheet: Sheet, target: Path) -> None:
    samples, gaps_um = mended_samples(sheet.reconstruction)
    header = [
        f"Mended by circuitgen {__version__} from {printable(sheet.path.name)}",
        f"SHA-256 of the original: {sha256_of(sheet.path)}",
        "Changed:",
        *(f"- {change}" for change in _changes(sheet)),
    ]
    if gaps_um.size:
        text = f"- {gaps_um.size} gaps between loose pieces and what they were joined to"
        header.append(f"{text} are cable now, {gaps_um.sum():.1f} um in all")
    header.append("Samples are numbered anew, from the soma outward; micrometres")
    write_swc(target, header=header, **samples)


def mended_samples(r: Reconstruction) -> tuple[dict[str, np.ndarray], np.ndarray]:
    """Return what `write_swc` needs, and the lengths of gaps that became cable.

    Parameters
    ----------
    r : Reconstruction
        A mended neuron with gaps.

    Returns
    -------
    samples : dict of ndarray
        Kind, position, radius and parent, parents before children.
    gaps_um : float64 (k,)
        Length of every gap outside the soma.
    """
    kind, position = r.kind.tolist(), [*r.position_um]
    radius, parent = r.radius_um.tolist(), r.parent.tolist()
    gap = r.bridged & (r.kind != Kind.SOMA)
    gaps_um = np.linalg.norm(r.position_um - r.begin_um, axis=1)[gap]
    for row, host, share in _joints(r, gap):
        # A joint between two samples becomes a sample between them.
        start, end = r.begin_um[host], r.position_um[host]
        position.append(start + share * (end - start))
        kind.append(kind[host])
        radius.append(radius[host])
        parent.append(parent[host])
        parent[host] = parent[row] = len(kind) - 1
    samples = {
        "kind": np.array(kind),
        "position_um": np.round(np.array(position), 3),
        "radius_um": np.maximum(np.array(radius), _WRITTEN_UM),
        "parent": np.array(parent),
    }
    return _without_doubles(samples), gaps_um[gaps_um > 0]


def _joints(r: Reconstruction, gap: np.ndarray) -> list[tuple[int, int, float]]:
    """Return (row, host, share) of gaps that begin between two samples, innermost first.

    The share is the joint's place on the host's piece, 0 at its begin, 1 at its sample.
    """
    rows = np.flatnonzero(gap & (r.kind[r.parent] != Kind.SOMA))
    host = r.parent[rows]
    start, end = r.begin_um[host], r.position_um[host]
    length = np.linalg.norm(end - start, axis=1)
    short = np.linalg.norm(r.begin_um[rows] - end, axis=1)
    share = 1.0 - short / np.where(length > 0, length, 1.0)
    between = (short > _WRITTEN_UM) & (length > 0) & ~r.bridged[host]
    order = np.lexsort((share, host))
    order = order[between[order]]
    return [(int(rows[i]), int(host[i]), max(float(share[i]), 0.0)) for i in order]


def _without_doubles(samples: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Leave out neurite samples that stand where their parent stands; sort the rest."""
    parent, position = samples["parent"].copy(), samples["position_um"]
    order, keep = _from_roots(parent), np.ones(parent.size, bool)
    for row in order:
        above = parent[row]
        if above >= 0 and not keep[above]:
            parent[row] = above = parent[above]
        if above >= 0 and samples["kind"][row] != Kind.SOMA:
            keep[row] = bool((position[row] != position[above]).any())
    rows = np.array([row for row in order if keep[row]])
    rank = np.full(parent.size + 1, -1)
    rank[rows] = np.arange(rows.size)
    taken = {name: values[rows] for name, values in samples.items()}
    return taken | {"parent": rank[parent[rows]]}


def _from_roots(parent: np.ndarray) -> list[int]:
    """Order rows with parents before children, otherwise as they are."""
    children: dict[int, list[int]] = {}
    for row, above in enumerate(parent.tolist()):
        children.setdefault(above, []).append(row)
    order, pending = [], children.get(-1, [])[::-1]
    while pending:
        order.append(pending.pop())
        pending += children.get(order[-1], [])[::-1]
    return order
