"""Reading and writing SWC 1.0, and files as they are found.

The public specification has seven columns (number, type, x, y, z, radius, parent) in
micrometres. Accepted beyond it: any order and numbering of samples, any comment and
white space, further columns, any line ending, roots marked by any negative parent or
by 0 when no sample has that number. Refused, with file and line: what is not text,
fewer than seven numbers, comma decimals, numbers that are not finite, a number given
twice, a parent that does not exist, a cycle.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from circuitgen.core.errors import InputError, Problem
from circuitgen.core.files import whole_file

_COLUMNS = 7
_MOST_PROBLEMS = 50
_LARGEST_COORDINATE = 1e8
_NOT_TEXT = {
    b"PK\x03\x04": "a spreadsheet or zip archive",
    b"\xd0\xcf\x11\xe0": "an old spreadsheet or document",
    b"\x1f\x8b": "a compressed file",
    b"%PDF": "a PDF",
    b"<?xm": "XML",
    b"\xff\xfe": "UTF-16 text",
    b"\xfe\xff": "UTF-16 text",
}


@dataclass(frozen=True)
class Samples:
    """The samples of one SWC file, parents before children.

    n samples: `number` (n,) as in the file, `kind` (n,), `position_um` (n, 3),
    `radius_um` (n,), `parent` (n,) index of the parent or -1, `line` (n,).
    `piece` (n,): number of the sample that ends, in the file, the piece between this
    sample and its parent; `backward` (n,): whether the file runs it the other way.
    `odd_roots`: how many roots were marked by something else than -1.
    """

    number: np.ndarray
    kind: np.ndarray
    position_um: np.ndarray
    radius_um: np.ndarray
    parent: np.ndarray
    line: np.ndarray
    piece: np.ndarray
    backward: np.ndarray
    odd_roots: int


def _read_lines(path: Path) -> list[str]:
    try:
        content = Path(path).read_bytes()
    except OSError as error:
        reason = error.strerror or error
        raise InputError(
            [Problem(str(path), None, "", f"cannot be read: {reason}")]
        ) from None
    for magic, meaning in _NOT_TEXT.items():
        if content.startswith(magic):
            rule = f"is {meaning}, not an SWC file; export it as plain text"
            raise InputError([Problem(str(path), 1, "", rule)])
    if b"\0" in content:
        raise InputError([Problem(str(path), 1, "", "is binary, not an SWC file")])
    text = content.decode("utf-8-sig", errors="replace")
    return text.replace("\r\n", "\n").replace("\r", "\n").split("\n")


def _line_rule(tokens: list[str]) -> str | None:
    """Say what is wrong with the tokens of one line, or None."""
    if any("," in token for token in tokens):
        return "has commas; write decimals with points and separate columns by blanks"
    if len(tokens) < _COLUMNS:
        return f"has {len(tokens)} of {_COLUMNS} columns"
    for token in tokens[:_COLUMNS]:
        try:
            value = float(token)
        except ValueError:
            return f"has {token[:40]!r} where a number belongs"
        if not np.isfinite(value):
            return f"has {token!r}, which is not finite"
    values = [float(token) for token in tokens[:_COLUMNS]]
    for index, name in ((0, "number"), (1, "type"), (6, "parent")):
        if values[index] != round(values[index]) or abs(values[index]) > 2**53:
            return f"has the {name} {tokens[index]}, which is not a whole number"
    if values[0] < 0 or values[1] < 0:
        return "has a negative number or type"
    if max(map(abs, values[2:6])) > _LARGEST_COORDINATE:
        return "has a coordinate or radius beyond any brain"
    return None


def _parse(path: Path) -> tuple[np.ndarray, np.ndarray]:
    """Return the seven columns (n, 7) and the line of every row."""
    rows, lines = [], []
    for number, text in enumerate(_read_lines(path), start=1):
        tokens = text.partition("#")[0].split()
        if tokens:
            rows.append(tokens)
            lines.append(number)
    if not rows:
        raise InputError([Problem(str(path), 1, "", "holds no sample")])
    try:
        table = np.array([row[:_COLUMNS] for row in rows], dtype=np.float64)
    except ValueError:
        table = None
    if table is None or _looks_wrong(table):
        problems = [
            Problem(str(path), line, "", rule)
            for row, line in zip(rows, lines, strict=True)
            if (rule := _line_rule(row))
        ]
        if problems:
            raise InputError(problems[:_MOST_PROBLEMS])
    return table, np.array(lines)


def _looks_wrong(table: np.ndarray) -> bool:
    """Tell whether a closer look at the lines is needed."""
    if table.ndim != 2 or table.shape[1] != _COLUMNS or not np.isfinite(table).all():
        return True
    whole = table[:, [0, 1, 6]]
    return bool(
        (whole != np.round(whole)).any()
        or (table[:, :2] < 0).any()
        or (np.abs(table) > _LARGEST_COORDINATE).any()
    )


def _parents(path: Path, number, parent_number, line) -> tuple[np.ndarray, int]:
    """Turn parent numbers into indices; refuse doubles and missing parents."""
    order = np.argsort(number, kind="stable")
    ranked = number[order]
    problems = [
        Problem(str(path), int(line[order[i + 1]]), "", f"repeats number {ranked[i]}")
        for i in np.flatnonzero(ranked[1:] == ranked[:-1])
    ]
    is_root = parent_number < 0
    if not (number == 0).any():
        is_root |= parent_number == 0
    odd_roots = int((is_root & (parent_number != -1)).sum())
    place = np.searchsorted(ranked, parent_number)
    place = np.clip(place, 0, number.size - 1)
    missing = ~is_root & (ranked[place] != parent_number)
    problems += [
        Problem(str(path), int(line[i]), "", f"has no parent {parent_number[i]}")
        for i in np.flatnonzero(missing)
    ]
    if problems:
        raise InputError(sorted(problems, key=lambda p: p.line)[:_MOST_PROBLEMS])
    return np.where(is_root, -1, order[place]), odd_roots


def order_from_roots(parent: np.ndarray) -> np.ndarray:
    """Order samples with parents before children; those in a cycle are left out.

    `parent` (n,) holds indices, -1 for roots.
    """
    children: dict[int, list[int]] = {}
    for sample, above in enumerate(parent.tolist()):
        children.setdefault(above, []).append(sample)
    order = children.get(-1, [])
    for sample in order:
        order.extend(children.get(sample, ()))
    return np.array(order, dtype=np.int64)


def read_samples(path: Path) -> Samples:
    """Read the samples of an SWC file; InputError says why a file cannot be used."""
    table, line = _parse(path)
    number, kind = table[:, 0].astype(np.int64), table[:, 1].astype(np.int64)
    parent, odd_roots = _parents(path, number, table[:, 6].astype(np.int64), line)
    order = order_from_roots(parent)
    if order.size < parent.size:
        lost = np.setdiff1d(np.arange(parent.size), order)
        rule = f"belongs to a cycle: {lost.size} samples are their own ancestors"
        raise InputError([Problem(str(path), int(line[lost].min()), "", rule)])
    rank = np.zeros(order.size + 1, np.int64)
    rank[order] = np.arange(order.size)
    rank[-1] = -1
    return Samples(
        number=number[order],
        kind=kind[order],
        position_um=table[order, 2:5],
        radius_um=table[order, 5],
        parent=rank[parent[order]],
        line=line[order],
        piece=number[order],
        backward=np.zeros(order.size, bool),
        odd_roots=odd_roots,
    )


def write_swc(path: Path, header: Iterable[str], columns: Iterable[np.ndarray]) -> None:
    """Write an SWC file, whole or not at all.

    Parameters
    ----------
    path : Path
        The file to write.
    header : iterable of str
        Comment lines without the leading ``#``.
    columns : iterable of seven arrays
        Number, type, x, y, z, radius (um), parent number; two decimals are kept.
    """
    lines = [f"# {text}".rstrip() for text in header]
    for number, kind, x, y, z, radius, parent in zip(*columns, strict=True):
        lines.append(f"{number} {kind} {x:.2f} {y:.2f} {z:.2f} {radius:.2f} {parent}")
    with whole_file(path) as partial:
        partial.write_text("\n".join(lines) + "\n", encoding="utf-8")
