"""Reading and writing the text of SWC files; `reconstruction` states the rules.

This file turns text into samples and refuses what cannot be meant: it knows columns,
numbers and parents, and nothing of neurons.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from pathlib import Path

import numpy as np

from circuitgen.core.errors import InputError, Problem
from circuitgen.core.files import whole_file
from circuitgen.morphology.findings import Findings, count_of
from circuitgen.morphology.samples import Samples
from circuitgen.morphology.trees import cycles_of, order_from_roots

COLUMNS = 7
MOST_PROBLEMS = 100
LARGEST_COORDINATE_UM = 1e8
_LARGEST_NUMBER = 2**53
_COMMENT_SIGNS = ("#", "%", ";", "!", "//", "/*", "*", "--", '"', "'")
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", re.ASCII)
_NOT_FINITE = re.compile(r"[+-]?(nan|inf|infinity)", re.ASCII | re.IGNORECASE)
_COMMA_DECIMAL = re.compile(r"[+-]?\d*,\d+([eE][+-]?\d+)?", re.ASCII)
_NOT_TEXT = {
    b"PK\x03\x04": "a spreadsheet or zip archive",
    b"\xd0\xcf\x11\xe0": "an old spreadsheet or document",
    b"\x1f\x8b": "a compressed file",
    b"%PDF": "a PDF",
    b"\xff\xfe": "UTF-16 text",
    b"\xfe\xff": "UTF-16 text",
    b"{\\rtf": "a word-processor document",
}


def _read_text(path: Path) -> str:
    """Return the text of a file; refuse what is no text."""
    try:
        content = Path(path).read_bytes()
    except OSError as error:
        reason = error.strerror or error
        rule = f"cannot be read: {reason}"
        raise InputError([Problem(str(path), None, "", rule)]) from None
    for magic, meaning in _NOT_TEXT.items():
        if content.startswith(magic):
            rule = f"is {meaning}, not an SWC file; export it as plain text"
            raise InputError([Problem(str(path), 1, "", rule)])
    if b"\0" in content:
        raise InputError([Problem(str(path), 1, "", "is binary, not an SWC file")])
    text = content.decode("utf-8-sig", errors="replace")
    if text.lstrip().startswith("<"):
        rule = "is XML or a page of the web, not an SWC file"
        raise InputError([Problem(str(path), 1, "", rule)])
    return text.replace("\r\n", "\n").replace("\r", "\n")


def _is_numeric(token: str) -> bool:
    return _NUMBER.fullmatch(token) is not None


def _is_title(text: str) -> bool:
    """Tell whether a line before the first sample is text, not a spoilt sample."""
    tokens = re.split(r"[\s,;]+", text)
    return sum(map(_is_numeric, tokens)) < COLUMNS - 3


def _data_lines(text: str, findings: Findings) -> tuple[list[str], np.ndarray]:
    """Return the lines that should be samples, comments cut off, and their numbers."""
    has_comments = "#" in text
    data, numbers, titles = [], [], []
    for number, full in enumerate(text.split("\n"), start=1):
        line = full.partition("#")[0] if has_comments else full
        if not line or line.isspace():
            continue
        # A digit, a sign or a point begins nearly every line of a file.
        if line.lstrip()[0] not in "0123456789+.":
            if line.lstrip().startswith(_COMMENT_SIGNS):
                continue
            if not data and _is_title(line.strip()):
                titles.append(number)
                continue
        data.append(line)
        numbers.append(number)
    titles_n = count_of(len(titles), "line")
    text = f"{titles_n} of text before the first sample skipped"
    findings.repair("title", f"{text}; connectivity is the same", titles)
    return data, np.array(numbers, dtype=np.int64)


def _separator_rule(text: str) -> str | None:
    """Say that columns or decimals are marked by commas, if they are."""
    tokens = text.split()
    if any(_COMMA_DECIMAL.fullmatch(token) for token in tokens[:COLUMNS]):
        if len(tokens) >= COLUMNS:
            return "has decimal commas; write decimals with points"
    for sign, word in ((",", "commas"), (";", "semicolons")):
        if sign in " ".join(tokens[:COLUMNS]):
            return f"has {word}; separate columns by blanks, write decimals with points"
    return None


def _line_rule(text: str) -> str | None:
    """Say what is wrong with one line, or None."""
    rule = _separator_rule(text)
    if rule:
        return rule
    tokens = text.split()[:COLUMNS]
    for token in tokens:
        if _NOT_FINITE.fullmatch(token):
            return f"has {token!r}, which is not finite"
        if not _is_numeric(token):
            return f"has {token[:40]!r} where a number belongs"
        if not np.isfinite(float(token)):
            return f"has {token[:40]!r}, which is not finite"
    if len(tokens) < COLUMNS:
        return f"has {len(tokens)} of {COLUMNS} columns"
    return _value_rule(tokens)


def _value_rule(tokens: list[str]) -> str | None:
    """Say which of seven numbers cannot be meant, or None."""
    values = [float(token) for token in tokens]
    for index, name in ((0, "number"), (1, "type"), (6, "parent")):
        if values[index] != round(values[index]) or abs(values[index]) > _LARGEST_NUMBER:
            return f"has the {name} {tokens[index][:40]}, which is not a whole number"
    if values[0] < 0 or values[1] < 0:
        return "has a negative number or type"
    if max(map(abs, values[2:6])) > LARGEST_COORDINATE_UM:
        return "has a coordinate or radius beyond any brain"
    return None


def _is_plain(table: np.ndarray) -> bool:
    """Tell whether every value can be meant, so that no closer look is needed."""
    whole = table[:, [0, 1, 6]]
    return bool(
        np.isfinite(table).all()
        and (whole == np.round(whole)).all()
        and (np.abs(whole) <= _LARGEST_NUMBER).all()
        and (table[:, :2] >= 0).all()
        and (np.abs(table[:, 2:6]) <= LARGEST_COORDINATE_UM).all()
    )


def _parse(lines: list[str]) -> np.ndarray | None:
    """Return the seven columns (n, 7), or None when a line is not plain."""
    try:
        table = np.loadtxt(lines, usecols=range(COLUMNS), comments=None, ndmin=2)
    except ValueError:
        return None
    return table if table.shape[0] == len(lines) and _is_plain(table) else None


def _sort_out(path: Path, data: list[str], line: np.ndarray):
    """Return the sound rows, their lines, the problems of the others, and their numbers.

    The numbers of unsound rows, where they can be read, keep their children from
    being called orphans; None when some cannot.
    """
    rules = [_line_rule(text) for text in data]
    bad = [i for i, rule in enumerate(rules) if rule]
    problems = [Problem(str(path), int(line[i]), "", rules[i]) for i in bad]
    good = [i for i, rule in enumerate(rules) if not rule]
    table = np.array([[float(t) for t in data[i].split()[:COLUMNS]] for i in good])
    first = [data[i].split()[0] for i in bad]
    spoilt = {float(token) for token in first if _is_numeric(token)}
    known = spoilt if all(map(_is_numeric, first)) else None
    return table.reshape(-1, COLUMNS), line[good], problems, known


def _link(path: Path, table: np.ndarray, line: np.ndarray, spoilt: set[float] | None):
    """Return parent indices, which roots are odd, and problems.

    An odd root is one that is not marked by -1.
    """
    number, above = table[:, 0], table[:, 6]
    order = np.argsort(number, kind="stable")
    ranked = number[order]
    twins = np.flatnonzero(ranked[1:] == ranked[:-1])
    problems = []
    for first, second in zip(order[twins], order[twins + 1], strict=True):
        rule = f"repeats the number {int(number[second])} of line {line[first]}"
        problems.append(Problem(str(path), int(line[second]), "", rule))
    is_root = above < 0
    if not (number == 0).any() and not (spoilt is None or 0.0 in spoilt):
        is_root |= above == 0
    place = np.minimum(np.searchsorted(ranked, above), number.size - 1)
    missing = ~is_root & (ranked[place] != above)
    if spoilt is not None:
        for i in np.flatnonzero(missing & ~np.isin(above, list(spoilt))):
            rule = f"has the parent {int(above[i])}, which is not in the file"
            problems.append(Problem(str(path), int(line[i]), "", rule))
    parent = np.where(is_root | missing, -1, order[place])
    return parent, is_root & (above != -1), problems


def _cycle_problems(path: Path, number, parent, line) -> list[Problem]:
    """Name every cycle once, at its first line."""
    problems = []
    for members in cycles_of(parent):
        if len(members) == 1:
            rule = f"has itself, {number[members[0]]}, as its parent"
        else:
            shown = ", ".join(str(number[i]) for i in members[:5])
            more = ", …" if len(members) > 5 else ""
            rule = f"belongs to a cycle of {len(members)} samples: {shown}{more}"
        problems.append(Problem(str(path), int(line[members].min()), "", rule))
    return problems


def _refuse(path: Path, problems: list[Problem]) -> None:
    """Raise the problems, in order of lines and bounded in number, if there are any."""
    if not problems:
        return
    problems = sorted(problems, key=lambda problem: problem.line)
    hidden = len(problems) - MOST_PROBLEMS
    if hidden > 0:
        rule = f"has {hidden} problems more"
        problems = [*problems[:MOST_PROBLEMS], Problem(str(path), None, "", rule)]
    raise InputError(problems)


def read_samples(path: Path, findings: Findings) -> Samples:
    """Read the samples of an SWC file.

    Parameters
    ----------
    path : Path
        The file.
    findings : Findings
        Takes note of what was mended.

    Raises
    ------
    InputError
        With every problem of the file, by line.
    """
    data, line = _data_lines(_read_text(path), findings)
    if not data:
        raise InputError([Problem(str(path), 1, "", "holds no sample")])
    table, problems, spoilt = _parse(data), [], set()
    if table is None:
        table, line, problems, spoilt = _sort_out(path, data, line)
    if not table.size:
        _refuse(path, problems)
    parent, odd, more = _link(path, table, line, spoilt)
    number = table[:, 0].astype(np.int64)
    order = order_from_roots(parent)
    if order.size < parent.size:
        more += _cycle_problems(path, number, parent, line)
    _refuse(path, problems + more)
    text = "{n} without parent not marked by -1 but by 0 or another negative number"
    findings.repair("root_mark", f"{text}; connectivity is the same", line[odd])
    samples = Samples(
        number=number,
        kind=table[:, 1].astype(np.int64),
        position_um=table[:, 2:5],
        radius_um=table[:, 5],
        parent=parent,
        begin_um=table[np.where(parent < 0, np.arange(parent.size), parent), 2:5],
        bridged=np.zeros(number.size, bool),
        line=line,
        piece=number,
        backward=np.zeros(number.size, bool),
    )
    return samples.taken(order)


def write_swc(
    path: Path,
    *,
    header: Iterable[str],
    kind: np.ndarray,
    position_um: np.ndarray,
    radius_um: np.ndarray,
    parent: np.ndarray,
) -> None:
    """Write samples as an SWC file, whole or not at all, numbered from 1 in order.

    Parameters
    ----------
    path : Path
        The file to write.
    header : iterable of str
        Comment lines, without the leading ``#``.
    kind : int (n,)
        SWC types.
    position_um : float (n, 3)
        Positions, written to 0.001 um.
    radius_um : float (n,)
        Radii, written to 0.001 um.
    parent : int (n,)
        Index of the parent, -1 for a root.
    """
    lines = [f"# {text}".rstrip() for text in header]
    values = np.round(np.column_stack([position_um, radius_um]), 3) + 0.0
    rows = zip(kind.tolist(), values.tolist(), parent.tolist(), strict=True)
    for number, (type_, numbers, above) in enumerate(rows, start=1):
        places = " ".join(f"{value:.3f}".rstrip("0").rstrip(".") for value in numbers)
        lines.append(f"{number} {type_} {places} {above + 1 if above >= 0 else -1}")
    with whole_file(path) as partial:
        partial.write_text("\n".join(lines) + "\n", encoding="utf-8", newline="\n")
