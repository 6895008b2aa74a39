"""Parts of a document as strict models; every broken rule of a part found at once."""

from __future__ import annotations

import re
from collections.abc import Collection, Iterator
from typing import get_args

from pydantic import BaseModel, ConfigDict, ValidationError, model_validator
from pydantic_core import InitErrorDetails, PydanticCustomError

from circuitgen.core.errors import InputError, nearest_name
from circuitgen.spec.document import Document, Location

# Where, the broken rule, the nearest valid name: the arguments of Document.problem.
Fault = tuple[Location, str, str | None]

_SHOWN_CHARACTERS = 60
_NAMES_LISTED = 20
_WORDED = "worded"
_UNIT = re.compile(
    r"_((?:per_)?(?:[nuµμcm]?m[23]?|microns?|micromet(?:er|re)s?|millimet(?:er|re)s?"
    r"|(?:[uµμcm]?m_)?per_[um]?s|[uµμm]?s|seconds?))$"
)


class RuleError(ValueError):
    """An input breaks a rule; mend the field that the message is about.

    Validators of fields raise it; `Part.rules` yields it.

    Parameters
    ----------
    rule : str
        What must hold, in words that follow the field's name: ``must be sorted``.
    field : str
        Name of the part's field that must be mended; empty for the whole part or,
        in a validator of one field, for that field.
    nearest : str or None
        The nearest valid name, when the value is a misspelt name.
    """

    def __init__(self, rule: str, *, field: str = "", nearest: str | None = None):
        super().__init__(rule)
        self.rule, self.field, self.nearest = rule, field, nearest


class Part(BaseModel):
    """A part of a document: types taken at their word, unknown keys refused, frozen.

    A key without a value counts as absent. Rules between fields belong in `rules`, not
    in model validators, so that they are reported along with faults of single fields.
    """

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True)

    @classmethod
    def rules(cls, given: dict) -> Iterator[RuleError]:
        """Yield every rule between fields that `given` breaks.

        `given` holds the keys that have a value, as they were written: a value may be
        of any type, and what is wrong with it alone is reported elsewhere.
        """
        return iter(())

    @model_validator(mode="wrap")
    @classmethod
    def _find_all(cls, raw, handler):
        if not isinstance(raw, dict):
            return handler(raw)
        # An unknown key stays, so that it is refused even without a value.
        given = {
            key: value
            for key, value in raw.items()
            if value is not None or key not in cls.model_fields
        }
        errors = []
        for error in cls.rules(given):
            place = (error.field,) if error.field else ()
            errors.append(_worded(place, error.rule, error.nearest))
        try:
            part = handler(given)
        except ValidationError as failure:
            for error in _own_errors(failure):
                errors.append(_worded(error["loc"], *_in_words(error, cls)))
        if errors:
            raise ValidationError.from_exception_data(cls.__name__, errors)
        return part


def _own_errors(failure: ValidationError) -> Iterator[dict]:
    """Yield the errors, less those of lists that lack only their faulty entries."""
    for error in failure.errors(include_url=False):
        if error["type"] == "too_short":
            if len(error["input"]) >= error["ctx"]["min_length"]:
                continue
        yield error


def _worded(place: Location, rule: str, nearest: str | None) -> InitErrorDetails:
    context = {"rule": rule, "nearest": nearest}
    kind = PydanticCustomError(_WORDED, "{rule}", context)
    return InitErrorDetails(type=kind, loc=place, input=None)


def unknown_name(
    name: str, known: Collection[str], kind: str = "known key"
) -> tuple[str, str | None]:
    """Say that a name is none of those known; return the rule and the nearest one.

    A known name in another unit, or in none, gets a hint.
    """
    stem = _UNIT.sub("", name)
    same_stem = [other for other in known if _UNIT.sub("", other) == stem]
    nearest = same_stem[0] if same_stem else nearest_name(name, known)
    if nearest is None:
        listed = list(known)
        more = ", …" if len(listed) > _NAMES_LISTED else ""
        names = ", ".join(shown(other) for other in listed[:_NAMES_LISTED])
        return f"is not a {kind}; there are {names}{more}", None
    if same_stem and (unit := _UNIT.search(nearest)):
        return f"is not a {kind}; the unit here is {unit[1]}", nearest
    return f"is not a {kind}", nearest


def shown(value: object) -> str:
    """Return a value as a message shows it: short, printable, quoted if it is text."""
    if value is None or isinstance(value, bool):
        return {None: "nothing", True: "true", False: "false"}[value]
    if isinstance(value, dict | tuple | list):
        return "'key: value' lines" if isinstance(value, dict) else "a list"
    if isinstance(value, float):
        return f"{value:.12g}"
    text = f"'{value}'" if isinstance(value, str) else str(value)
    if len(text) > _SHOWN_CHARACTERS:
        text = text[:_SHOWN_CHARACTERS] + "…"
    return "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in text)


_LIMITS = {
    "greater_than": ("gt", ">"),
    "greater_than_equal": ("ge", ">="),
    "less_than": ("lt", "<"),
    "less_than_equal": ("le", "<="),
}
_KINDS = {
    "int_type": "a whole number",
    "int_parsing": "a whole number",
    "int_from_float": "a whole number",
    "float_type": "a number",
    "float_parsing": "a number",
    "finite_number": "a finite number",
    "string_type": "text",
    "path_type": "a file name",
    "bool_type": "true or false",
    "bool_parsing": "true or false",
    "tuple_type": "a list",
    "dict_type": "'key: value' lines",
    "model_type": "'key: value' lines",
}


def _models_in(annotation: object) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [model for part in get_args(annotation) for model in _models_in(part)]


def _keys_at(model: type[BaseModel], place: Location) -> list[str]:
    """Return the keys that a model knows at a place inside it."""
    models = [model]
    for part in place:
        fields = [one.model_fields[part] for one in models if part in one.model_fields]
        # An index or a free key leads into a container of the models at hand.
        if fields:
            models = [one for field in fields for one in _models_in(field.annotation)]
    return [key for one in models for key in one.model_fields]


def _in_words(error: dict, model: type[BaseModel]) -> tuple[str, str | None]:
    """Put an error of pydantic into the words of a problem: rule, nearest name."""
    kind, context, value = error["type"], error.get("ctx", {}), error["input"]
    if kind == _WORDED:
        return context["rule"], context["nearest"]
    if isinstance(context.get("error"), ValueError):
        return str(context["error"]), getattr(context["error"], "nearest", None)
    if kind == "missing":
        return "is missing", None
    if kind == "extra_forbidden":
        *place, key = error["loc"]
        return unknown_name(key, _keys_at(model, tuple(place)))
    if kind in _LIMITS:
        name, sign = _LIMITS[kind]
        limit = context[name]
        limit = f"{limit:g}" if isinstance(limit, float) else limit
        return f"= {shown(value)} must be {sign} {limit}", None
    if kind == "literal_error":
        names = re.findall(r"'([^']*)'", context["expected"])
        rule = f"= {shown(value)} must be one of {', '.join(names)}"
        return rule, nearest_name(value, names)
    if kind == "too_short":
        least = context["min_length"]
        return f"must have at least {least} {'entry' if least == 1 else 'entries'}", None
    if kind in _KINDS:
        quotable = kind == "string_type" and isinstance(value, int | float)
        hint = "; write it in quotes" if quotable else ""
        # Not `shown`, which drops the point of 2.0: it is what is wrong with it here.
        is_point_wrong = kind.startswith("int_") and isinstance(value, float)
        text = str(value) if is_point_wrong else shown(value)
        return f"= {text} must be {_KINDS[kind]}{hint}", None
    return f"= {shown(value)}: {error['msg']}", None


def validate(
    data: object, model: type[BaseModel]
) -> tuple[BaseModel | None, list[Fault]]:
    """Validate plain data; return the instance (None if there are faults) and faults."""
    try:
        return model.model_validate(data), []
    except ValidationError as failure:
        faults = []
        for error in _own_errors(failure):
            # A fault of a mapping's key carries a mark behind the key itself.
            place = tuple(part for part in error["loc"] if part != "[key]")
            faults.append((place, *_in_words(error, model)))
        return None, faults


def validate_document(document: Document, model: type[BaseModel]) -> BaseModel:
    """Return a document as an instance of `model`, best a `Part`.

    Raises InputError with every problem, in order of lines.
    """
    instance, faults = validate(document.data, model)
    if faults:
        problems = [document.problem(*fault) for fault in faults]
        raise InputError(sorted(problems, key=lambda problem: problem.line))
    return instance
