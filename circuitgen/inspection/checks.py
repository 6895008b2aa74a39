"""Tests of a reconstruction as a whole, each with its statistic, threshold and reason.

"Healthy" are the 49 synthetic stand-ins and five real neurons (fly, electron
microscopy); the number behind is the most extreme of them. "Common practice" marks what
is usual rather than measured here.

no_cable
    Nothing outside the soma.
axon_short
    Axon under 1,000 um or under half of the dendrites (both over 500 um of cable).
    Healthy axons have 1.3 times their dendrites or more. Common practice: local axons
    of cortical cells have several mm, more than their dendrites.
cut_face
    Many tips on one plane (`faces`). A note, no warning, where the plane faces the
    pia, below which branches end by themselves. Healthy chance 6e-4, found below 1e-5.
flat, thin
    Smallest over largest principal spread of cable under 0.01: drawn in one plane;
    under 0.05: thin. Healthy 0.12.
upright_apical
    Angle between the toward-pia axis and the middle of the apical cable, seen from the
    soma, 60 to 120 degrees, if that lies 50 um away. Healthy within 25 degrees of the
    axis, either way. From 120 degrees on a note: inverted cells exist.
upright_shape
    Without apical dendrite: spread along an axis across 1.6 times that along both
    others (healthy 1.12), or under 0.4 of both while these are within 1.3 of one
    another (healthy 0.84 of the next). Round arbors cannot be told.
shrunk_across
    Root mean square direction of cable along one axis across under 0.87 of the other
    (healthy 0.88). Cells have no side, so both should be alike; shrinkage by 0.7 gives
    0.69 to 0.86 on the stand-ins.
shrunk_upright
    Bends along the toward-pia axis under 0.84 of the mean, and under 0.90 of each, of
    those along the other two axes (healthy 0.86 for the mean). Finds 9 of 10 arbors
    that are shortened by 0.7. Neither test sees shrinkage by the same factor along
    all axes.
radii_default
    Over 90 % of cable length of one radius to 0.001 um, if not all. Healthy 0.35.
soma_size
    Soma radius above 50 um or below 1 um, if the soma was in the file. Common
    practice: somata of cortical neurons have radii of some 4 to 15 um. Only a
    warning, since many files have no measured soma.
"""

from __future__ import annotations

import numpy as np

from circuitgen.inspection.faces import Face, find_face
from circuitgen.inspection.measures import Measures
from circuitgen.inspection.remarks import Remark
from circuitgen.inspection.shape import Shape, shape_of
from circuitgen.morphology.arbor import Arbor, Kind

AXIS_NAMES = "xyz"
LEAST_AXON_UM, LEAST_AXON_SHARE, COMPARED_UM = 1_000.0, 0.5, 500.0
FLAT, THIN = 0.01, 0.05
APICAL_AWAY_UM, APICAL_COSINE = 50.0, 0.5
LONG, SHORT, ALIKE = 1.6, 0.4, 1.3
ACROSS = 0.87
BENDS_MEAN, BENDS_EACH = 0.84, 0.90
DEFAULT_SHARE = 0.9
SOMA_RADIUS_UM = (1.0, 50.0)
_PIA_COSINE = 0.94


def check(arbor: Arbor, measures: Measures, upright: str, codes: set[str]):
    """Return the remarks on an arbor that has its file's own axes.

    Parameters
    ----------
    arbor : Arbor
        Built with ``upright="z"``, so that x, y and z are the file's.
    measures : Measures
        Of the same arbor.
    upright : str
        The file's axis toward the pia, ``x`` to ``-z``.
    codes : set of str
        What the reader found: tests that ask the same, or make no sense then, are
        left out.

    Returns
    -------
    list of Remark
    """
    remarks = [*_axon(measures), *_radii(arbor, codes), *_soma(measures, codes)]
    shape = shape_of(arbor)
    if shape is None:
        return [*remarks, _no_cable()]
    if codes & {"units_large", "units_small"}:
        return remarks
    flat = _flat(shape)
    if flat:  # all that lies in one plane ends on it, and has no axes to compare
        return remarks + flat
    remarks += _face(find_face(arbor), upright)
    turned = _upright(shape, upright)
    # Which axes lie across is unknown where the apical dendrite shows another one up.
    # An odd spread alone may come from shrinkage as well: then both are told.
    if not any(remark.severity == "blocks" for remark in turned):
        turned += _shrunk(shape, upright)
    return remarks + turned + _downward(shape, upright)


def up_vector(upright: str) -> np.ndarray:
    """Return the unit vector of an axis toward the pia, ``x`` to ``-z``."""
    vector = np.zeros(3)
    vector[AXIS_NAMES.index(upright[-1])] = -1.0 if upright[0] == "-" else 1.0
    return vector


def _axes(upright: str) -> tuple[int, int, int]:
    """Return the indices of the axis toward the pia and of the two across it."""
    up = AXIS_NAMES.index(upright[-1])
    one, other = (axis for axis in range(3) if axis != up)
    return up, one, other


def _no_cable() -> Remark:
    effect = "A soma alone makes no contacts and takes hardly any."
    remedy = "Take another reconstruction, or another export of this one."
    return Remark("blocks", "no_cable", "no cable outside the soma", effect, remedy)


def _axon(m: Measures) -> list[Remark]:
    """Tell of an axon too short to be whole."""
    if not m.axon_um or m.dendrite_um < COMPARED_UM:
        return []
    share = m.axon_um / m.dendrite_um
    if m.axon_um >= LEAST_AXON_UM and share >= LEAST_AXON_SHARE:
        return []
    seen = f"axon of {m.axon_um:,.0f} um, {share:.2f} times the dendrites"
    effect = "Most contacts that the cell should make are missing; pathways from its "
    effect += "type reach too few cells and may be infeasible to fit."
    remedy = "Take a reconstruction with a whole axon, or use this one as a target only."
    return [Remark("warning", "axon_short", seen, effect, remedy)]


def _radii(arbor: Arbor, codes: set[str]) -> list[Remark]:
    """Tell of a radius that was probably filled in."""
    neurite = arbor.kind != Kind.SOMA
    if not neurite.any() or "radii_equal" in codes:
        return []
    value, which = np.unique(
        np.round(arbor.end_radius_um[neurite], 3), return_inverse=True
    )
    length = np.bincount(which, weights=arbor.length_um[neurite])
    share = length.max() / (length.sum() or 1.0)
    if share <= DEFAULT_SHARE:
        return []
    radius = value[length.argmax()]
    seen = f"{share:.0%} of the cable has a radius of {radius:g} um: not measured?"
    effect = "Gaps between surfaces are nominal there: contacts of thick branches are "
    effect += "missed, those of thin ones are too many."
    remedy = "Widen appositions.max_gap_um by the likely error, or measure radii."
    return [Remark("warning", "radii_default", seen, effect, remedy)]


def _soma(m: Measures, codes: set[str]) -> list[Remark]:
    """Tell of a soma that no neuron has."""
    low, high = SOMA_RADIUS_UM
    if codes & {"soma_made", "soma_radius", "units_large", "units_small"}:
        return []
    if low <= m.soma_radius_um <= high:
        return []
    seen = f"soma radius of {m.soma_radius_um:.3g} um, outside {low:g} to {high:g} um"
    effect = "Contacts on the soma are wrong; if the units of the file are, all are."
    remedy = "Check the units of the file; write the measured radius of the soma."
    return [Remark("warning", "soma_size", seen, effect, remedy)]


def _face(face: Face | None, upright: str) -> list[Remark]:
    """Tell of tips that end on a plane."""
    if face is None:
        return []
    place = ", ".join(f"{value:+.2f}" for value in face.normal)
    axis = int(np.abs(face.normal).argmax())
    if abs(face.normal[axis]) > 1 - 1e-4:
        place = ("-" if face.normal[axis] < 0 else "+") + AXIS_NAMES[axis]
    else:
        place = f"the direction ({place})"
    seen = f"{face.tips_n} tips ({face.axon_tips_n} of the axon) end within "
    seen += f"{face.slab_um:g} um of one plane, {face.distance_um:.0f} um from the soma "
    seen += f"toward {place}; {face.near_n} in a layer ten times as thick "
    seen += f"(chance {face.chance:.0e})"
    if float(np.dot(face.normal, up_vector(upright))) > _PIA_COSINE:
        effect = "None if the branches end below the pia; else what is missing above "
        effect += "makes and takes no contacts."
        remedy = "If the block was cut there, take another reconstruction."
        return [Remark("note", "cut_face", seen, effect, remedy)]
    effect = "What was cut off makes and takes no contacts: on the opposite side "
    effect += f"{face.missing_um:,.0f} um of cable lie farther out than this plane. "
    effect += "Connection probabilities at a distance come out too low on that side."
    remedy = "Take a cell from deeper in the slice; if there is none, keep the azimuth "
    remedy += "random (circuitgen does) and trust far pathways of its type less."
    return [Remark("warning", "cut_face", seen, effect, remedy)]


def _flat(shape: Shape) -> list[Remark]:
    """Tell of an arbor without depth."""
    if shape.thinnest >= THIN:
        return []
    seen = "cable spreads in its thinnest direction "
    seen += f"{shape.thinnest:.3f} times as far as in its widest"
    effect = "A flat arbor meets cells in its plane too often and all others hardly: "
    effect += "neither counts of appositions nor their spread mean anything."
    remedy = "Take a reconstruction with measured depth, or correct the depth for "
    remedy += "shrinkage before use."
    if shape.thinnest < FLAT:
        return [Remark("blocks", "flat", seen, effect, remedy)]
    return [Remark("warning", "thin", seen, effect, remedy)]


def _upright(shape: Shape, upright: str) -> list[Remark]:
    """Tell of an axis toward the pia that is probably another one."""
    up, one, other = _axes(upright)
    effect = "Dendrites and axon lie in the wrong layers, so that nearly every pathway "
    effect += "of the type is wrong."
    if shape.apical_away_um >= APICAL_AWAY_UM:
        cosine = float(shape.apical_up @ up_vector(upright))
        if abs(cosine) >= APICAL_COSINE:
            return []
        angle = np.degrees(np.arccos(cosine))
        likely = _likely_axis(shape.apical_up)
        seen = f"the apical dendrite lies {angle:.0f} degrees off {upright}, the axis "
        seen += f"toward the pia, nearest to {likely}"
        remedy = f"Set upright: {likely} in the spec (here: --upright={likely}), or "
        remedy += "turn the file."
        return [Remark("blocks", "upright_apical", seen, effect, remedy)]
    spread = shape.spread_um
    for axis, third in ((one, other), (other, one)):
        long = spread[axis] > LONG * max(spread[up], spread[third])
        beside = sorted((spread[up], spread[third]))
        short = spread[axis] < SHORT * beside[0] and beside[1] < ALIKE * beside[0]
        if long or short:
            name = AXIS_NAMES[axis]
            sizes = " x ".join(f"{value:.0f}" for value in spread)
            seen = f"cable spreads {sizes} um (x, y, z): {'long' if long else 'short'} "
            seen += f"along {name}, not along {upright[-1]}, the axis toward the pia"
            remedy = f"If the file has {name} toward the pia, set upright: {name} or "
            remedy += f"-{name}; a cell that lies along a layer is right as it is."
            return [Remark("warning", "upright_shape", seen, effect, remedy)]
    return []


def _likely_axis(direction: np.ndarray) -> str:
    axis = int(np.abs(direction).argmax())
    return ("-" if direction[axis] < 0 else "") + AXIS_NAMES[axis]


def _downward(shape: Shape, upright: str) -> list[Remark]:
    """Note an apical dendrite that points away from the pia."""
    cosine = float(shape.apical_up @ up_vector(upright))
    if shape.apical_away_um < APICAL_AWAY_UM or cosine > -APICAL_COSINE:
        return []
    seen = f"the apical dendrite points away from the pia ({upright})"
    effect = "None for an inverted cell; else all layers are upside down."
    turned = upright[1:] if upright[0] == "-" else f"-{upright}"
    remedy = f"If the cell is not inverted, set upright: {turned}."
    return [Remark("note", "apical_down", seen, effect, remedy)]


def _shrunk(shape: Shape, upright: str) -> list[Remark]:
    """Tell of an axis along which the arbor is shortened."""
    up, one, other = _axes(upright)
    effect = "Cable is denser and reaches less far along that axis: too many "
    effect += "appositions near the soma, too few farther away."
    remedy = "Divide that coordinate by the measured shrinkage of the tissue; if depth "
    remedy += "was traced roughly instead, smooth it."
    across, bend = shape.direction, shape.bend
    short, long = (one, other) if across[one] < across[other] else (other, one)
    if across[short] < ACROSS * across[long]:
        ratio, names = (
            across[short] / across[long],
            (AXIS_NAMES[short], AXIS_NAMES[long]),
        )
        seen = f"cable runs along {names[0]} only {ratio:.2f} times as much as along "
        seen += f"{names[1]}, both across the axis toward the pia"
        return [Remark("warning", "shrunk_across", seen, effect, remedy)]
    mean = float(np.sqrt(bend[one] * bend[other]))
    each = min(bend[one], bend[other])
    if bend[up] < BENDS_MEAN * mean and bend[up] < BENDS_EACH * each:
        seen = f"branches bend along {AXIS_NAMES[up]} only {bend[up] / mean:.2f} times "
        seen += "as much as along the other axes"
        return [Remark("warning", "shrunk_upright", seen, effect, remedy)]
    return []
