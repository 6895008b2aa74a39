"""From a spec file to a checked Spec: every problem at once."""

from __future__ import annotations

from pathlib import Path

from circuitgen.core.errors import InputError, Problem, nearest_name
from circuitgen.spec.document import Document, read_document, validation_problems
from circuitgen.spec.models import PlacedCellType, Spec, SpecFile
from circuitgen.spec.recordings import inline_recordings, read_recordings


def _mapping(document: Document, key: str) -> dict:
    """Return a mapping of the raw data, empty when it is absent or something else."""
    value = document.data.get(key)
    return value if isinstance(value, dict) else {}


def _layer_problems(document: Document) -> list[Problem]:
    raw = document.data.get("layers")
    rows = raw if isinstance(raw, tuple) else ()
    names = [row.get("name") for row in rows if isinstance(row, dict)]
    problems = [
        document.problem(("layers", index, "name"), f"= {name!r} is given twice")
        for index, name in enumerate(names)
        if name in names[:index]
    ]
    known = [str(name) for name in names]
    for cell_type, fields in _mapping(document, "cell_types").items():
        for key in ("density_per_mm3", "count"):
            per_layer = fields.get(key) if isinstance(fields, dict) else None
            for name in per_layer if isinstance(per_layer, dict) else ():
                if name not in known:
                    place = ("cell_types", cell_type, key, name)
                    near = nearest_name(name, known)
                    problems.append(document.problem(place, "is no layer", near))
    return problems


def _group_problems(document: Document) -> list[Problem]:
    types = list(_mapping(document, "cell_types"))
    problems = []
    for group, members in _mapping(document, "groups").items():
        if group in types:
            rule = "is also the name of a cell type"
            problems.append(document.problem(("groups", group), rule))
        if not isinstance(members, tuple):
            continue
        if not members:
            problems.append(document.problem(("groups", group), "names no cell type"))
        for index, member in enumerate(members):
            place = ("groups", group, index)
            if member not in types:
                rule, near = f"= {member!r} is no cell type", nearest_name(member, types)
                problems.append(document.problem(place, rule, near))
            elif member in members[:index]:
                problems.append(document.problem(place, f"= {member!r} is named twice"))
    return problems


def _glob(folder: Path, pattern: str) -> list[Path]:
    """Files that a pattern finds, relative to a folder; an absolute one by itself."""
    whole = Path(pattern)
    if whole.is_absolute():
        folder, pattern = Path(whole.anchor), str(whole.relative_to(whole.anchor))
    return sorted(path.resolve() for path in folder.glob(pattern) if path.is_file())


def _nearest_file(folder: Path, pattern: str) -> str | None:
    parent = Path(pattern).parent
    try:
        names = [path.name for path in (folder / parent).iterdir() if path.is_file()]
    except (ValueError, OSError):
        return None
    near = nearest_name(Path(pattern).name, names)
    return str(parent / near) if near else None


def _find_morphologies(document: Document):
    """Return the files of each cell type, and problems for globs that find nothing."""
    folder = document.path.resolve().parent
    found: dict[str, tuple[Path, ...]] = {}
    problems = []
    for name, fields in _mapping(document, "cell_types").items():
        value = fields.get("morphologies") if isinstance(fields, dict) else None
        patterns = value if isinstance(value, tuple) else (value,)
        files: set[Path] = set()
        if not patterns:
            place = ("cell_types", name, "morphologies")
            problems.append(document.problem(place, "names no file"))
        for pattern in patterns:
            if not isinstance(pattern, str):
                continue
            try:
                matches = _glob(folder, pattern)
            except (ValueError, NotImplementedError, OSError):
                matches = []
            if not matches:
                place = ("cell_types", name, "morphologies")
                rule = f"= {pattern!r} finds no file from {folder}"
                near = _nearest_file(folder, pattern)
                problems.append(document.problem(place, rule, near))
            files.update(matches)
        found[name] = tuple(sorted(files))
    return found, problems


def _named_file(document: Document, location: tuple[str, ...]):
    """Return the file that a field names, and a problem when it does not exist."""
    value: object = document.data
    for part in location:
        value = value.get(part) if isinstance(value, dict) else None
    if not isinstance(value, str):
        return None, []
    path = document.path.parent / value
    if path.is_file():
        return path, []
    near = _nearest_file(document.path.parent, value)
    return None, [document.problem(location, f"= {value!r} is no file", near)]


def _find_recordings(document: Document):
    """Return the recordings, their file if they have one, and problems."""
    names = [*_mapping(document, "cell_types"), *_mapping(document, "groups")]
    if isinstance(document.data.get("recordings"), tuple):
        recordings, problems = inline_recordings(document, names)
        return recordings, None, problems
    path, problems = _named_file(document, ("recordings",))
    if path is None:
        return (), None, problems
    recordings, problems = read_recordings(path, names)
    return recordings, path, problems


def load_spec(path: Path) -> Spec:
    """Read and check a spec file and the recordings that it names.

    Raises InputError with every problem of the spec and of its recordings, in order
    of file and line.
    """
    document = read_document(Path(path))
    fields, problems = validation_problems(document, SpecFile)
    problems += _layer_problems(document) + _group_problems(document)
    morphologies, more = _find_morphologies(document)
    mesh_file, mesh_problems = _named_file(document, ("column", "file"))
    recordings, recordings_file, row_problems = _find_recordings(document)
    problems += more + mesh_problems + row_problems
    if problems:
        problems = list(dict.fromkeys(problems))
        raise InputError(sorted(problems, key=lambda p: (p.file, p.line or 0)))
    used = {file for files in morphologies.values() for file in files}
    used |= {file for file in (mesh_file, recordings_file) if file is not None}
    return Spec(
        path=document.path,
        text=document.text,
        name=fields.name,
        seed=fields.seed,
        column=fields.column,
        mesh_file=mesh_file,
        layers=fields.layers,
        cell_types=tuple(
            PlacedCellType(
                name=name,
                morphologies=morphologies[name],
                **{
                    key: getattr(cell_type, key)
                    for key in type(cell_type).model_fields
                    if key != "morphologies"
                },
            )
            for name, cell_type in fields.cell_types.items()
        ),
        groups=fields.groups,
        appositions=fields.appositions,
        recordings=recordings,
        conduction=fields.conduction,
        input_files=tuple(sorted(used)),
    )
