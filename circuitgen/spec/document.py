"""YAML documents as plain data that remembers the line of every field."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import yaml

from circuitgen.core.errors import InputError, Problem

MOST_VALUES = 200_000
DEEPEST = 40

Location = tuple[str | int, ...]


class _Loader(getattr(yaml, "CSafeLoader", yaml.SafeLoader)):
    """Composes nodes; plain values are typed as below, not as in YAML 1.1."""

    yaml_implicit_resolvers: dict = {}


# The core schema of YAML 1.2.2 (section 10.3.2), decimal numbers only: `NO` is a
# name, `2026-12-01` is text and `6e4` is a number, as every modeller expects.
_NULL, _BOOL, _INT, _FLOAT, _TEXT, _LIST, _MAPPING = (
    f"tag:yaml.org,2002:{name}"
    for name in ("null", "bool", "int", "float", "str", "seq", "map")
)
for _tag, _pattern, _first in (
    (_NULL, r"~|null|Null|NULL|", ["~", "n", "N", ""]),
    (_BOOL, r"true|True|TRUE|false|False|FALSE", list("tTfF")),
    (_INT, r"[-+]?[0-9]+", list("-+0123456789")),
    (
        _FLOAT,
        r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?"
        r"|[-+]?\.(inf|Inf|INF)|\.(nan|NaN|NAN)",
        list("-+.0123456789"),
    ),
):
    _Loader.add_implicit_resolver(_tag, re.compile(rf"^(?:{_pattern})$"), _first)

_PLAIN_VALUES: dict[str, Callable[[str], object]] = {
    _NULL: lambda text: None,
    _BOOL: lambda text: text.lower() == "true",
    _INT: int,
    _FLOAT: lambda text: float(
        text.lower().replace(".inf", "inf").replace(".nan", "nan")
    ),
    _TEXT: str,
}


@dataclass(frozen=True)
class Document:
    """A YAML file as plain data, with the line of every field.

    Attributes
    ----------
    path : Path
        The file as the user named it.
    text : str
        Its text, as it was.
    data : dict
        Its fields. Keys are text as written, lists are tuples.
    lines : dict
        Line, counted from 1, by location, for instance ``("layers", 0, "name")``; for
        a key's value the line of the key.
    """

    path: Path
    text: str
    data: dict[str, object]
    lines: dict[Location, int]

    def line(self, location: Location) -> int:
        """Return the line of a field, or of the nearest field around it."""
        while location not in self.lines:
            location = location[:-1]
        return self.lines[location]

    def problem(
        self, location: Location, rule: str, nearest: str | None = None
    ) -> Problem:
        """Return a problem at a field of this file; list places count from 1."""
        parts = (part + 1 if isinstance(part, int) else part for part in location)
        field = ".".join(map(str, parts))
        return Problem(str(self.path), self.line(location), field, rule, nearest)


def read_text(path: Path) -> str:
    """Return the content of a UTF-8 text file, without a byte order mark.

    Raises InputError, with the line where there is one, when there is no such text.
    """
    line = None
    try:
        content = Path(path).read_bytes()
        text = content.decode("utf-8-sig")
        bad = yaml.reader.Reader.NON_PRINTABLE.search(text)
        if bad is None:
            return text
        line = text.count("\n", 0, bad.start()) + 1
        rule = f"has the unprintable character U+{ord(bad.group()):04X}; is it text?"
    except FileNotFoundError:
        rule = "does not exist"
    except IsADirectoryError:
        rule = "is a folder; a file is needed"
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        rule = f"is not UTF-8 text: byte 0x{content[error.start]:02x}; save it as UTF-8"
    except (OSError, ValueError) as error:
        rule = f"cannot be read: {getattr(error, 'strerror', None) or error}"
    raise InputError([Problem(str(path), line, "", rule)])


class _Walk:
    """Turns YAML nodes into plain data; collects lines and problems on the way."""

    def __init__(self, path: Path):
        self.path = path
        self.lines: dict[Location, int] = {}
        self.problems: list[Problem] = []
        self.values_n = 0

    def refuse(self, node: yaml.Node, location: Location, rule: str) -> None:
        line = node.start_mark.line + 1
        document = Document(self.path, "", {}, {location: line})
        self.problems.append(document.problem(location, rule))

    def value(self, node: yaml.Node, location: Location) -> object:
        self.values_n += 1
        if self.values_n > MOST_VALUES:
            # Aliases of aliases can stand for more values than any memory holds.
            self.refuse(node, (), f"the file stands for more than {MOST_VALUES} values")
            raise InputError(self.problems)
        self.lines.setdefault(location, node.start_mark.line + 1)
        if len(location) > DEEPEST:
            self.refuse(node, location[:3], f"is nested more than {DEEPEST} deep")
        elif isinstance(node, yaml.MappingNode) and node.tag == _MAPPING:
            return self.mapping(node, location)
        elif isinstance(node, yaml.SequenceNode) and node.tag == _LIST:
            return tuple(
                self.value(child, (*location, index))
                for index, child in enumerate(node.value)
            )
        elif isinstance(node, yaml.ScalarNode) and node.tag in _PLAIN_VALUES:
            return self.plain(node, location)
        else:
            self.refuse(
                node, location, f"has the tag {node.tag}; only plain YAML is read"
            )
        return None

    def plain(self, node: yaml.ScalarNode, location: Location) -> object:
        try:
            return _PLAIN_VALUES[node.tag](node.value)
        except ValueError:
            kind = node.tag.rpartition(":")[2]
            self.refuse(node, location, f"cannot be read as {kind}")
            return None

    def mapping(self, node: yaml.MappingNode, location: Location) -> dict:
        data: dict[str, object] = {}
        for key_node, value_node in node.value:
            if not isinstance(key_node, yaml.ScalarNode):
                self.refuse(key_node, location, "has a key that is not a plain name")
                continue
            key = key_node.value
            here = (*location, key)
            if key in data:
                first = self.lines[here]
                self.refuse(key_node, here, f"is given twice, first on line {first}")
                continue
            self.lines[here] = key_node.start_mark.line + 1
            data[key] = self.value(value_node, here)
        return data


def _syntax_problem(path: Path, text: str, error: yaml.YAMLError) -> Problem:
    mark = getattr(error, "problem_mark", None)
    if mark is None:
        return Problem(str(path), None, "", f"is not valid YAML: {error}")
    lines = text.splitlines()
    broken = lines[mark.line] if mark.line < len(lines) else ""
    rule = f"is not valid YAML: {error.problem}"
    if "\t" in broken[: len(broken) - len(broken.lstrip())]:
        rule = "begins with a tab; indent with blanks"
    elif error.context_mark is not None and error.context_mark.line != mark.line:
        rule += f" ({error.context} that begins on line {error.context_mark.line + 1})"
    return Problem(str(path), mark.line + 1, "", rule)


def _root_problem(path: Path, node: yaml.Node | None) -> Problem:
    if node is None:
        return Problem(str(path), None, "", "is empty")
    kind = "a list" if isinstance(node, yaml.SequenceNode) else "a single value"
    rule = f"must hold 'key: value' lines at the top, not {kind}"
    return Problem(str(path), node.start_mark.line + 1, "", rule)


def read_document(path: Path) -> Document:
    """Read a YAML file whose top level is a mapping.

    Safe: nothing but mappings, lists, text, numbers, true, false and null is made.
    Raises InputError with the line of each duplicate key and tag, or of the first
    fault of syntax.
    """
    path = Path(path)
    text = read_text(path)
    try:
        node = yaml.compose(text, _Loader)
    except yaml.YAMLError as error:
        raise InputError([_syntax_problem(path, text, error)]) from None
    except RecursionError:
        rule = f"is nested more than {DEEPEST} deep"
        raise InputError([Problem(str(path), None, "", rule)]) from None
    if not isinstance(node, yaml.MappingNode):
        raise InputError([_root_problem(path, node)])
    walk = _Walk(path)
    data = walk.value(node, ())
    if walk.problems:
        raise InputError(sorted(walk.problems, key=lambda problem: problem.line))
    return Document(path, text, data, walk.lines)
