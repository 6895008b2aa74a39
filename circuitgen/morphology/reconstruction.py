"""A reconstruction fit for use: what is accepted, mended, warned of and refused.

The text (`swc`)
    SWC 1.0 has seven columns: number, type, x, y, z, radius, parent, in micrometres.
    Also accepted: samples in any order and numbered in any way; comments (from ``#``
    on anywhere; lines that begin with ``% ; ! // /* * --`` or a quote), lines of text
    before the first sample (reported); any line ends, tabs, blanks, a byte order mark,
    scientific notation, further columns. Roots may be marked by any negative parent,
    or by 0 when no sample has that number (reported).
    Refused, every problem at once by line: what is not text, XML, no sample at all,
    fewer than seven columns, text where a number belongs, decimal commas, values that
    are not finite, numbers, types or parents that are not whole, negative numbers or
    types, coordinates beyond 1e8 um, a number given twice, a parent that is not in the
    file, a cycle, a sample that is its own parent. Later: nothing but glia, more than
    1,000 loose pieces, more than 10 m of cable.

Types (`repair`)
    Glia (7) is left out. 0, 5, 6 and above 7 take the type of the nearest ancestor
    that is axon, basal or apical dendrite; without one they are basal dendrite.

Soma (`soma`)
    The largest group of connected samples of type soma, and what lies within 10 um of
    its surface; soma samples farther away take their ancestor's type (warning).
    A tree that the file roots elsewhere is rooted at its soma.
    One sample is a sphere. Three by the three-point convention (two at one radius on
    opposite sides of the first) are a sphere of that radius about the first. An outline
    (it runs round its middle, and comes back) is a sphere about the middle, of the mean
    distance from it. Anything else is capsules from sample to sample; the centre is
    their mean by length. Spheres carry the number of the soma's root sample.
    Without a soma, the root of the tree with the most cable becomes one, of its own
    radius but at least 3 um (warning). A soma radius of zero or less takes the soma's
    largest, else 3 um (warning).

Radii (`repair`)
    A radius of zero or less takes the nearest ancestor's in the same neurite, else a
    descendant's, else 0.1 um.

Pieces between a soma and a neurite, or between two types
    belong to the sample that ends them and have its radius at both ends. The course
    inside the soma is no cable of the arbor (`build` says where it leaves).

Loose pieces (`loose`)
    A root within 10 um of the soma's surface is joined to the soma. Any other loose
    piece is joined by that of its ends (root or tip) which lies nearest to joined cable
    of its kind (axon to axon, dendrite to dendrite; to anything, the soma included,
    when the cell has no joined cable of that kind), if that is within 50 um; nearest
    pieces first, and those may carry others. It is rooted at that end. Path length
    runs on across the gap from the nearest point; the gap is no cable. Farther pieces
    are left out (warning). Both are counted with their cable.

Things to look at
    No axon; no dendrite; an extent above 20 mm or radii above 10 um (nanometres or
    voxels?); an extent below 25 um (voxels or millimetres?); all radii equal.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from pathlib import Path

import numpy as np

from circuitgen.core.errors import InputError, Problem
from circuitgen.morphology.arbor import Kind
from circuitgen.morphology.findings import Finding, Findings
from circuitgen.morphology.loose import join_loose
from circuitgen.morphology.repair import (
    drop_glia,
    mend_radii,
    note_doubles,
    settle_kinds,
)
from circuitgen.morphology.samples import Samples
from circuitgen.morphology.soma import settle_soma, shape_soma
from circuitgen.morphology.swc import read_samples

MOST_CABLE_UM = 1e7
_WIDEST_UM = 20_000.0
_NARROWEST_UM = 25.0
_THICKEST_UM = 10.0


@dataclass(frozen=True)
class Reconstruction:
    """One neuron as its file has it, mended; n samples, parents before children.

    Arrays are read-only. The soma is the rows whose kind is `Kind.SOMA`; a sphere is
    one row. Positions are in the file's own frame.

    Attributes
    ----------
    name : str
        File name without ending.
    number : int64 (n,)
        SWC number of the sample.
    kind : int8 (n,)
        A `Kind`.
    position_um : float64 (n, 3)
        Sample positions.
    radius_um : float64 (n,)
        Sample radii, positive.
    parent : int64 (n,)
        Row of the sample before, -1 for the soma's own roots only.
    begin_um : float64 (n, 3)
        Where the piece that ends at the sample begins.
    bridged : bool (n,)
        True where that piece is a gap: path runs across it, cable does not.
    piece : int64 (n,)
        SWC number of the sample that ends that piece in the file.
    backward : bool (n,)
        True where the file runs that piece toward the soma.
    soma_center_um : float64 (3,)
        Centre of the soma.
    cable_length_um : float
        Sum over all pieces between sample and parent as in the file, those of the
        soma and from the soma included, whatever was left out or mended.
    findings : tuple of Finding
        What was mended and what should be looked at.
    """

    name: str
    number: np.ndarray
    kind: np.ndarray
    position_um: np.ndarray
    radius_um: np.ndarray
    parent: np.ndarray
    begin_um: np.ndarray
    bridged: np.ndarray
    piece: np.ndarray
    backward: np.ndarray
    soma_center_um: np.ndarray
    cable_length_um: float
    findings: tuple[Finding, ...]

    def __post_init__(self):
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, np.ndarray):
                value.setflags(write=False)

    def as_samples(self) -> dict[str, np.ndarray]:
        """Return what `write_swc` needs to write the mended neuron; gaps stay gaps."""
        return {
            "kind": self.kind,
            "position_um": self.position_um,
            "radius_um": self.radius_um,
            "parent": np.where(self.bridged, -1, self.parent),
        }


def read_reconstruction(path: Path) -> Reconstruction:
    """Read an SWC file by the rules of this module.

    Parameters
    ----------
    path : Path
        The file.

    Returns
    -------
    Reconstruction

    Raises
    ------
    InputError
        With file, line and reason of every problem, if the file cannot be used.
    """
    path, findings = Path(path), Findings()
    samples = read_samples(path, findings)
    cable_um, line = float(samples.length_um.sum()), int(samples.line.min())
    samples = drop_glia(samples, findings)
    if not samples.kind.size:
        rule = "holds no sample of a neuron, only glia"
        raise InputError([Problem(str(path), line, "", rule)])
    if cable_um > MOST_CABLE_UM:
        rule = f"begins {cable_um:.3g} um of cable; more than {MOST_CABLE_UM:g} um are "
        rule += "beyond any neuron: are the units micrometres?"
        raise InputError([Problem(str(path), line, "", rule)])
    samples = settle_soma(samples, findings)
    samples = settle_kinds(samples, findings)
    samples = mend_radii(samples, findings)
    samples, center = shape_soma(samples, findings)
    note_doubles(samples, findings)
    samples = join_loose(path, samples, findings)
    _warn(samples, findings)
    return Reconstruction(
        name=path.stem,
        number=samples.number,
        kind=samples.kind.astype(np.int8),
        position_um=samples.position_um,
        radius_um=samples.radius_um,
        parent=samples.parent,
        begin_um=samples.begin_um,
        bridged=samples.bridged,
        piece=samples.piece,
        backward=samples.backward,
        soma_center_um=center,
        cable_length_um=cable_um,
        findings=tuple(findings.found),
    )


def _warn(samples: Samples, findings: Findings) -> None:
    """Note what a modeller should look at."""
    neurite = samples.kind != Kind.SOMA
    if not (samples.kind == Kind.AXON).any():
        findings.warn("no_axon", "no axon: the cell contacts nobody")
    if not (neurite & (samples.kind != Kind.AXON)).any():
        findings.warn("no_dendrite", "no dendrite: only its soma and axon take contacts")
    if not neurite.any():
        return
    radius = samples.radius_um[neurite]
    extent_um = float(np.ptp(samples.position_um, axis=0).max())
    if extent_um > _WIDEST_UM or np.median(radius) > _THICKEST_UM:
        text = f"extent {extent_um:.0f} um, median radius {np.median(radius):.3g} um: "
        text += "are the units nanometres or voxels? Contacts need micrometres"
        findings.warn("units_large", text)
    elif extent_um < _NARROWEST_UM:
        text = f"extent {extent_um:.3g} um: are the units voxels or millimetres? "
        findings.warn("units_small", text + "Contacts need micrometres")
    if radius.size > 1 and np.ptp(radius) == 0:
        text = f"all radii are {radius[0]:g} um: probably not measured; gaps are nominal"
        findings.warn("radii_equal", text)
