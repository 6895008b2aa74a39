"""What an inspection says: what was seen, what it does to connectivity, what to do."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from circuitgen.morphology import Finding

SEVERITIES = ("blocks", "warning", "repair", "note")
_BLOCKING = {"units_large", "units_small"}


@dataclass(frozen=True)
class Remark:
    """One finding, told in three parts.

    Attributes
    ----------
    severity : {"blocks", "warning", "repair", "note"}
        ``blocks``: a circuit with this file is wrong throughout. ``warning``: some of
        its connectivity is. ``repair``: mended when read. ``note``: good to know.
    code : str
        One word for the rule, the same for every file.
    seen : str
        What was seen, with the number.
    effect : str
        What it does to the connectivity.
    remedy : str
        What to do.
    line : int or None
        First line of the file that it concerns.
    """

    severity: str
    code: str
    seen: str
    effect: str
    remedy: str
    line: int | None = None


_SAME = "Connectivity is the same."
_LEAVE = "Nothing; --fix-to writes a file without it."
_UNITS_EFFECT = (
    "Appositions are sought within about a micrometre; at another scale the cell"
    " touches nearly nobody, or everybody."
)
# What the reader's own findings do to the connectivity, and what to do about them.
READER = {
    "title": (_SAME, _LEAVE),
    "root_mark": (_SAME, _LEAVE),
    "doubled": (_SAME, _LEAVE),
    "glia": ("They contact nobody.", _LEAVE),
    "lone": ("They have no cable, so they contact nobody.", _LEAVE),
    "type_inherited": (
        "They make and take contacts as the type that they take here.",
        "If axon and dendrite are known, write types 2, 3 and 4 into the file.",
    ),
    "radius_inherited": (
        "Gaps between surfaces are nominal there.",
        "Nothing, if the radii beside them are sound; else measure them.",
    ),
    "soma_joined": (
        "Path lengths, and so delays, run on across the gap.",
        _LEAVE,
    ),
    "rerooted": ("Path lengths, and so delays, count from the soma.", _LEAVE),
    "soma_outline": ("Contacts on the soma are on that sphere.", _LEAVE),
    "soma_radius": (
        "Contacts on the soma are nominal.",
        "Write the measured radius of the soma into the file.",
    ),
    "soma_apart": (
        "If the file holds two cells, the contacts of both go to one.",
        "Look at the drawing; keep one cell in a file.",
    ),
    "soma_made": (
        "Contacts on the soma, the axon initial segment and all path lengths are"
        " nominal; depth in the column counts from the made soma.",
        "Add a sample of type 1 at the soma.",
    ),
    "loose_kept": (
        "Their contacts count; a delay is wrong where a piece was joined wrongly.",
        "Look at the drawing; join them in the file where they really belong.",
    ),
    "loose_dropped": (
        "They contact nobody: the cell has fewer appositions than it should.",
        "Join them in the file, or remove them if they belong to another cell.",
    ),
    "no_axon": (
        "The cell contacts nobody. It can be a target, never a source.",
        "Use it for a type whose axon does not matter, or take another"
        " reconstruction; if its axon has another type number, write 2.",
    ),
    "no_dendrite": (
        "Only its soma and its axon initial segment can be contacted.",
        "Take another reconstruction; if dendrites have another type, write 3 or 4.",
    ),
    "units_large": (
        _UNITS_EFFECT,
        "Multiply x, y, z and radius by the size of the unit in micrometres"
        " (nanometres: 0.001).",
    ),
    "units_small": (
        _UNITS_EFFECT,
        "Multiply x, y, z and radius by the size of the unit in micrometres"
        " (millimetres: 1000).",
    ),
    "radii_equal": (
        "Gaps between surfaces are nominal; contacts of thick branches are missed,"
        " those of thin ones are too many.",
        "Widen appositions.max_gap_um by the likely error, or measure radii.",
    ),
}


def remarks_of_reader(findings: Iterable[Finding]) -> list[Remark]:
    """Turn the reader's findings into remarks."""
    remarks = []
    for finding in findings:
        effect, remedy = READER[finding.code]
        blocks = finding.code in _BLOCKING
        severity = "blocks" if blocks else finding.severity
        seen = _seen(finding.text)
        remarks.append(
            Remark(severity, finding.code, seen, effect, remedy, finding.line)
        )
    return remarks


def printable(text: object) -> str:
    """Replace characters that do not print, so that a name cannot spoil a line."""
    return "".join(sign if sign.isprintable() else "?" for sign in str(text))


def _seen(text: str) -> str:
    """Leave out of a finding's text what it means; a remark says that itself."""
    for mark in ("; ", ": "):
        if mark in text:
            return text.rpartition(mark)[0]
    return text
