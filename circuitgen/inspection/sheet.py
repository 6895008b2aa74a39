"""One file inspected: its numbers, its remarks, and whether a build can use it."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from pathlib import Path

from circuitgen.core.errors import InputError, Problem
from circuitgen.inspection.checks import check
from circuitgen.inspection.measures import Measures, measure
from circuitgen.inspection.remarks import SEVERITIES, Remark, remarks_of_reader
from circuitgen.morphology import Reconstruction, build_arbor, read_reconstruction
from circuitgen.morphology.arbor import Arbor

# No segment is cut for length here: only the course of the cable counts.
_UNCUT_UM = 1e9
_AIS_UM = 40.0


@dataclass(frozen=True)
class Sheet:
    """What an inspection found in one file.

    Attributes
    ----------
    path : Path
        The file.
    upright : str
        The axis toward the pia that was assumed.
    remarks : tuple of Remark
        The gravest first.
    measures : Measures or None
        None when the file was refused.
    reconstruction, arbor
        As read, and with the file's own axes; None when refused.
    """

    path: Path
    upright: str
    remarks: tuple[Remark, ...]
    measures: Measures | None = None
    reconstruction: Reconstruction | None = None
    arbor: Arbor | None = None

    @property
    def usable(self) -> bool:
        """Whether nothing blocks use of the file."""
        return not self.number_of("blocks")

    def number_of(self, severity: str) -> int:
        """Count the remarks of a severity."""
        return sum(remark.severity == severity for remark in self.remarks)

    def as_dict(self) -> dict[str, object]:
        """Return what ``--json`` prints for the file."""
        return {
            "file": str(self.path),
            "upright": self.upright,
            "usable": self.usable,
            "measures": asdict(self.measures) if self.measures else None,
            "remarks": [asdict(remark) for remark in self.remarks],
        }


def inspect_file(path: Path, upright: str = "y") -> Sheet:
    """Inspect one SWC file.

    Parameters
    ----------
    path : Path
        The file.
    upright : str
        The file's axis toward the pia, ``x`` to ``-z``.

    Returns
    -------
    Sheet
        A file that the reader refuses has one remark that blocks for each problem.

    Raises
    ------
    InputError
        If the argument is no readable file of text at all.
    """
    path = Path(path)
    refuse_unreadable(path)
    try:
        reconstruction = read_reconstruction(path)
    except InputError as error:
        refused = tuple(_refusal(problem) for problem in error.problems)
        return Sheet(path, upright, refused)
    arbor = build_arbor(
        reconstruction, upright="z", min_spacing_um=_UNCUT_UM, ais_um=_AIS_UM
    )
    measures = measure(arbor)
    remarks = remarks_of_reader(reconstruction.findings)
    codes = {remark.code for remark in remarks}
    remarks += check(arbor, measures, upright, codes)
    remarks.sort(key=lambda remark: SEVERITIES.index(remark.severity))
    return Sheet(path, upright, tuple(remarks), measures, reconstruction, arbor)


def refuse_unreadable(path: Path) -> None:
    """Raise InputError for what is no file of text: absent, a folder, empty, binary."""
    try:
        if path.is_dir():
            rule = f"is a folder; name its files, for instance {path}/*.swc"
        else:
            content = path.read_bytes()
            if content.strip() and b"\0" not in content:
                return
            rule = "is binary, not an SWC file" if content.strip() else "is empty"
    except OSError as error:
        rule = f"cannot be read: {error.strerror or error}"
    raise InputError([Problem(str(path), None, "", rule)])


def _refusal(problem: Problem) -> Remark:
    seen = " ".join(part for part in (problem.field, problem.rule) if part)
    if problem.line is not None:
        seen = f"line {problem.line} {seen}"
    return Remark(
        "blocks",
        "refused",
        seen,
        "A build stops at this file.",
        "Mend what is named, or take another export of the file.",
        problem.line,
    )
