"""From a spec file to a checked Spec, or to every problem at once."""

from __future__ import annotations

import glob
import os
from collections.abc import Iterator
from pathlib import Path

import yaml

from circuitgen.core.errors import InputError, Problem, nearest_name
from circuitgen.spec.document import Document, read_document
from circuitgen.spec.models import CellType, CellTypeEntry, Spec, SpecFile
from circuitgen.spec.recordings import Recording, inline_recordings, read_recordings
from circuitgen.spec.validation import Fault, shown, unknown_name, validate


def _part(data: object, key: str) -> dict:
    """Return a mapping of unchecked data, empty when it is absent or something else."""
    value = data.get(key) if isinstance(data, dict) else None
    return value if isinstance(value, dict) else {}


def _layer_faults(data: dict) -> Iterator[Fault]:
    """Yield layers that are named twice, and numbers of cells for unknown layers."""
    layers = data.get("layers")
    layers = layers if isinstance(layers, tuple) else ()
    names = [layer.get("name") for layer in layers if isinstance(layer, dict)]
    names = [name for name in names if isinstance(name, str)]
    seen: set[str] = set()
    for index, layer in enumerate(layers):
        name = layer.get("name") if isinstance(layer, dict) else None
        if isinstance(name, str) and name in seen:
            yield ("layers", index, "name"), f"= {shown(name)} is given twice", None
        seen.add(str(name))
    for cell_type, entry in _part(data, "cell_types").items():
        for key in ("density_per_mm3", "count"):
            for name in _part(entry, key) if names else ():
                if name not in names:
                    place = ("cell_types", cell_type, key, name)
                    yield place, *unknown_name(name, names, "layer of the spec")


def _group_faults(data: dict) -> Iterator[Fault]:
    """Yield groups named like a type, and members that are no type or doubled."""
    types = _part(data, "cell_types")
    for group, members in _part(data, "groups").items():
        if group in types:
            yield ("groups", group), "is also the name of a cell type", None
        members = members if isinstance(members, tuple) else ()
        for index, member in enumerate(members):
            place = ("groups", group, index)
            if not isinstance(member, str):
                continue
            if types and member not in types:
                rule, nearest = unknown_name(member, types, "cell type of the spec")
                yield place, f"= {shown(member)} {rule}", nearest
            elif member in members[:index]:
                yield place, f"= {shown(member)} is named twice", None


def _absolute(folder: Path, name: str) -> Path:
    # Links are not followed: the name that the user gave a file is its name.
    return Path(os.path.abspath(folder / name))


def _nearest_file(folder: Path, pattern: str) -> str | None:
    """Return the file beside the wanted one whose name is most like it."""
    wanted = Path(pattern)
    try:
        entries = os.scandir(folder / wanted.parent)
        names = sorted(entry.name for entry in entries if entry.is_file())
    except (OSError, ValueError):
        return None
    near = nearest_name(wanted.name, names)
    return str(wanted.parent / near) if near else None


class _Files:
    """Finds the files that a spec names, relative to the folder of the spec."""

    def __init__(self, document: Document):
        self.document, self.folder = document, document.path.parent
        self.used: set[Path] = set()
        self.problems: list[Problem] = []

    def find(self, place: tuple, pattern: object, *, exact: bool = False) -> list[Path]:
        """Return the files of a name, or of a pattern of names unless it is `exact`."""
        if not isinstance(pattern, str):
            return []
        try:
            # A file whose name happens to look like a pattern is found by its name.
            names = [pattern]
            if not exact:
                names += glob.glob(pattern, root_dir=self.folder, recursive=True)
            files = {_absolute(self.folder, name) for name in names}
            files = {file for file in files if file.is_file()}
        except (OSError, ValueError):
            files = set()
        if not files:
            folder = _absolute(self.folder, str(Path(pattern).parent))
            state = "" if os.path.isdir(folder) else ", which does not exist"
            rule = f"= {shown(pattern)} finds no file in the folder {folder}{state}"
            nearest = _nearest_file(self.folder, pattern)
            self.problems.append(self.document.problem(place, rule, nearest))
        self.used |= files
        return sorted(files)

    def morphologies(self) -> dict[str, tuple[Path, ...]]:
        """Return the reconstructions of every cell type."""
        found = {}
        for name, entry in _part(self.document.data, "cell_types").items():
            place = ("cell_types", name, "morphologies")
            patterns = entry.get("morphologies") if isinstance(entry, dict) else None
            if not isinstance(patterns, tuple):
                found[name] = tuple(self.find(place, patterns))
                continue
            files = [self.find((*place, i), p) for i, p in enumerate(patterns)]
            found[name] = tuple(sorted({file for some in files for file in some}))
        return found


def _recordings(
    document: Document, *, read_table: bool
) -> tuple[tuple[Recording, ...], list[Problem]]:
    data = document.data
    types = _part(data, "cell_types")
    names = (*types, *_part(data, "groups")) if types else ()
    outcomes: Iterator[Recording | Problem] = iter(())
    if read_table:
        table = document.path.parent / data["recordings"]
        outcomes = read_recordings(table, names)
    elif isinstance(data.get("recordings"), tuple):
        outcomes = inline_recordings(document, names)
    outcomes = list(outcomes)
    recordings = (one for one in outcomes if isinstance(one, Recording))
    return tuple(recordings), [one for one in outcomes if isinstance(one, Problem)]


def _with_files(name: str, entry: CellTypeEntry, files: tuple[Path, ...]) -> CellType:
    fields = dict(entry) | {"name": name, "morphologies": files}
    return CellType.model_construct(**fields)


def load_spec(path: Path) -> Spec:
    """Read and check a spec file and everything that it names.

    Raises InputError with every problem of the spec and of its recordings, in order
    of file and line. The content of reconstructions and meshes is not looked at.
    """
    document = read_document(path)
    data = document.data
    fields, faults = validate(data, SpecFile)
    faults += [*_layer_faults(data), *_group_faults(data)]
    files = _Files(document)
    morphologies = files.morphologies()
    mesh = files.find(("column", "file"), _part(data, "column").get("file"), exact=True)
    table = files.find(("recordings",), data.get("recordings"), exact=True)
    recordings, problems = _recordings(document, read_table=bool(table))
    problems += files.problems + [document.problem(*fault) for fault in faults]
    if problems:
        raise InputError(sorted(problems, key=lambda one: (one.file, one.line or 0)))
    values = dict(fields) | {
        "column": fields.column.model_copy(update={"file": mesh[0] if mesh else None}),
        "cell_types": tuple(
            _with_files(name, entry, morphologies[name])
            for name, entry in fields.cell_types.items()
        ),
        "recordings": recordings,
    }
    return Spec(
        **values,
        path=_absolute(Path(), str(path)),
        text=document.text,
        input_files=tuple(sorted(files.used)),
    )


def parse_groups(text: str) -> dict[str, tuple[str, ...]]:
    """Return the groups of a spec's text that was loaded before."""
    groups = yaml.safe_load(text).get("groups") or {}
    return {name: tuple(members) for name, members in groups.items()}
