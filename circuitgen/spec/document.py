"""YAML documents that remember the line of every field, and their validation."""

from __future__ import annotations

import re
import types
import typing
from dataclasses import dataclass
from pathlib import Path

import yaml
from pydantic import BaseModel, ValidationError

from circuitgen.core.errors import InputError, Problem, nearest_name

_MOST_NODES = 200_000
_SHOWN_CHARACTERS = 60
_PLAIN_TAGS = ("tag:yaml.org,2002:map", "tag:yaml.org,2002:seq")
_MERGE_TAG = "tag:yaml.org,2002:merge"

Location = tuple[str | int, ...]


class RuleError(ValueError):
    """A rule that a validator found broken; mend the field that it names."""

    def __init__(self, rule: str, nearest: str | None = None):
        super().__init__(rule)
        self.nearest = nearest


class _Loader(yaml.SafeLoader):
    """Safe YAML in which ``6e4`` is a number, as every modeller expects."""


_Loader.add_implicit_resolver(
    "tag:yaml.org,2002:float",
    re.compile(r"^[-+]?(\d+\.?\d*|\.\d+)[eE][-+]?\d+$"),
    list("-+.0123456789"),
)


@dataclass(frozen=True)
class Document:
    """A YAML file as plain data (lists as tuples), with the line of every field.

    Attributes
    ----------
    path : Path
        The file.
    text : str
        Its text.
    data : dict
        Its fields.
    lines : dict
        Line, counted from 1, by location, for instance ``("layers", 0, "name")``.
    """

    path: Path
    text: str
    data: dict
    lines: dict[Location, int]

    def line(self, location: Location) -> int | None:
        """Return the line of a field, or of the nearest field around it."""
        while location not in self.lines and location:
            location = location[:-1]
        return self.lines.get(location)

    def problem(
        self, location: Location, rule: str, nearest: str | None = None
    ) -> Problem:
        """Return a problem at a field of this file."""
        field = ".".join(str(part) for part in location)
        return Problem(str(self.path), self.line(location), field, rule, nearest)


def read_text(path: Path) -> str:
    """Return a text file's content; an InputError says why it cannot be read."""
    try:
        return Path(path).read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        rule = "does not exist"
    except IsADirectoryError:
        rule = "is a folder; a file is needed"
    except UnicodeDecodeError as error:
        rule = f"is not UTF-8 text (byte {error.start})"
    except OSError as error:
        rule = f"cannot be read: {error.strerror}"
    raise InputError([Problem(str(path), None, "", rule)])


class _Walk:
    """Turns YAML nodes into plain data and collects lines and problems."""

    def __init__(self, path: Path):
        self.path, self.lines, self.problems = path, {}, []
        self.loader = _Loader("")
        self.nodes = 0

    def refuse(self, node: yaml.Node, location: Location, rule: str) -> None:
        field = ".".join(map(str, location))
        line = node.start_mark.line + 1
        self.problems.append(Problem(str(self.path), line, field, rule))

    def value(self, node: yaml.Node, location: Location) -> object:
        self.nodes += 1
        if self.nodes > _MOST_NODES:
            self.refuse(node, (), f"the file has more than {_MOST_NODES} fields")
            raise InputError(self.problems)
        self.lines.setdefault(location, node.start_mark.line + 1)
        if isinstance(node, yaml.CollectionNode) and node.tag not in _PLAIN_TAGS:
            self.refuse(node, location, f"has the tag {node.tag}; plain values only")
            return None
        if isinstance(node, yaml.MappingNode):
            return self.mapping(node, location)
        if isinstance(node, yaml.SequenceNode):
            return tuple(
                self.value(child, (*location, index))
                for index, child in enumerate(node.value)
            )
        try:
            return self.loader.construct_object(node)
        except (yaml.YAMLError, ValueError):
            self.refuse(node, location, f"has the tag {node.tag}; plain values only")
            return None

    def mapping(self, node: yaml.MappingNode, location: Location) -> dict:
        out: dict = {}
        for key_node, value_node in node.value:
            if not isinstance(key_node, yaml.ScalarNode):
                self.refuse(key_node, location, "has a key that is not a plain name")
                continue
            key = key_node.value
            here = (*location, key)
            if key_node.tag == _MERGE_TAG:
                self.refuse(key_node, here, "is not supported; write the fields out")
                continue
            if key in out:
                first = self.lines[here]
                self.refuse(key_node, here, f"is given twice (first on line {first})")
                continue
            self.lines[here] = key_node.start_mark.line + 1
            out[key] = self.value(value_node, here)
        return out


def _syntax_problem(path: Path, text: str, error: yaml.YAMLError) -> Problem:
    if isinstance(error, yaml.reader.ReaderError):
        line = text.count("\n", 0, error.position) + 1
        rule = f"is not valid YAML: the character {ascii(chr(error.character))}"
        return Problem(str(path), line, "", rule)
    mark = getattr(error, "problem_mark", None)
    rule = f"is not valid YAML: {getattr(error, 'problem', None) or error}"
    return Problem(str(path), mark.line + 1 if mark else None, "", rule)


def read_document(path: Path) -> Document:
    """Read a YAML file whose top level is a mapping.

    Raises InputError with the line of each syntax error, duplicate key or tag.
    """
    text = read_text(path)
    walk = _Walk(path)
    try:
        node = yaml.compose(text, _Loader)
        data = walk.value(node, ()) if isinstance(node, yaml.MappingNode) else None
    except yaml.YAMLError as error:
        raise InputError([_syntax_problem(path, text, error)]) from None
    except RecursionError:
        raise InputError([Problem(str(path), 1, "", "is nested too deep")]) from None
    if not isinstance(node, yaml.MappingNode):
        rule = "is empty" if node is None else "must hold 'key: value' lines at the top"
        raise InputError([Problem(str(path), 1, "", rule)])
    if walk.problems:
        raise InputError(walk.problems)
    return Document(Path(path), text, data, walk.lines)


def _inner_types(annotation: object) -> list[object]:
    origin = typing.get_origin(annotation)
    if origin in (typing.Union, types.UnionType):
        return [
            inner
            for option in typing.get_args(annotation)
            for inner in _inner_types(option)
        ]
    if origin is typing.Annotated:
        return _inner_types(typing.get_args(annotation)[0])
    return [annotation]


def _keys_at(model: object, location: Location) -> list[str]:
    """Names that are valid beside the last part of a location."""
    options = [model]
    for part in location[:-1]:
        following: list[object] = []
        for option in options:
            if isinstance(option, type) and issubclass(option, BaseModel):
                field = option.model_fields.get(str(part))
                following += _inner_types(field.annotation) if field else []
            elif typing.get_args(option):
                values = [a for a in typing.get_args(option) if a is not Ellipsis]
                following += _inner_types(values[-1])
        options = following
    return [
        name
        for option in options
        if isinstance(option, type) and issubclass(option, BaseModel)
        for name in option.model_fields
    ]


_LIMITS = {"greater_than": ("gt", ">"), "greater_than_equal": ("ge", ">=")}
_LIMITS |= {"less_than": ("lt", "<"), "less_than_equal": ("le", "<=")}
_KINDS = {
    "int": "a whole number",
    "float": "a number",
    "string": "text",
    "bool": "true or false",
    "tuple": "a list",
    "dict": "a group of 'key: value' lines",
    "model": "a group of 'key: value' lines",
    "finite": "a finite number",
}


def _shown(value: object) -> str:
    text = repr(value) if isinstance(value, str | bool) else str(value)
    text = "nothing" if value is None else text
    text = str(list(value)) if isinstance(value, tuple) else text
    text = text if len(text) <= _SHOWN_CHARACTERS else text[:_SHOWN_CHARACTERS] + "…"
    return "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in text)


def describe_error(model: type[BaseModel], error: dict) -> tuple[str, str | None]:
    """Put one validation error into words: the broken rule, and the nearest name."""
    kind, context, value = error["type"], error.get("ctx", {}), error["input"]
    if kind == "extra_forbidden":
        names = _keys_at(model, error["loc"])
        return "is not a known key", nearest_name(error["loc"][-1], names)
    if kind == "missing":
        return "is missing", None
    if kind in _LIMITS:
        name, sign = _LIMITS[kind]
        return f"= {_shown(value)} must be {sign} {context[name]:g}", None
    if kind == "literal_error":
        names = re.findall(r"'([^']*)'", context["expected"])
        rule = f"= {_shown(value)} must be one of {', '.join(names)}"
        return rule, nearest_name(value, names)
    if isinstance(context.get("error"), RuleError):
        return str(context["error"]), context["error"].nearest
    if kind == "union_tag_not_found":
        return f"= {_shown(value)} must be text or a list", None
    for prefix, meaning in _KINDS.items():
        if kind.startswith(prefix) and "too_" not in kind:
            return f"= {_shown(value)} must be {meaning}", None
    return f"= {_shown(value)}: {error['msg']}", None


def _in_file(document: Document, error: dict) -> Location:
    """Location of an error without the parts that pydantic adds to those of the file."""
    location: Location = ()
    for part in error["loc"]:
        if (*location, part) in document.lines:
            location = (*location, part)
    return (*location, error["loc"][-1]) if error["type"] == "missing" else location


def validation_problems(document: Document, model: type[BaseModel]):
    """Validate a document; return (model instance or None, problems)."""
    try:
        return model.model_validate(document.data), []
    except ValidationError as failure:
        problems = []
        for error in failure.errors(include_url=False):
            location = _in_file(document, error)
            rule, nearest = describe_error(model, {**error, "loc": location})
            problems.append(document.problem(location, rule, nearest))
        return None, problems


def validate_document(document: Document, model: type[BaseModel]) -> BaseModel:
    """Return the document as a model instance, or raise InputError with everything."""
    instance, problems = validation_problems(document, model)
    if problems:
        raise InputError(problems)
    return instance
