"""From a document to a model: every fault in words, with its line and nearest key."""

from __future__ import annotations

from typing import Annotated, Literal

import pytest
from pydantic import BaseModel, ConfigDict, Field, field_validator, model_validator

from circuitgen.core.errors import InputError
from circuitgen.spec import (
    LengthUm,
    Name,
    Part,
    Positive,
    RuleError,
    read_document,
    validate_document,
)


class Branch(Part):
    kind: Literal["axon", "basal"]
    width_um: LengthUm = 1.0
    low: float = 0.0
    high: float = 1.0

    @classmethod
    def rules(cls, given):
        if "low" in given and given["low"] == given.get("high"):
            yield RuleError("must differ from low", field="high")
        if "low" in given and "width_um" not in given:
            yield RuleError("says too little")


class Tree(Part):
    name: Name
    count: Annotated[int, Field(ge=1, le=10)] = 1
    density_per_mm3: Positive = 1.0
    axon_um_per_ms: Positive = 1.0
    upright: bool = True
    branches: tuple[Branch, ...] = ()
    named: dict[Name, Branch] = Field(default_factory=dict)
    best: Branch | None = None


class PlainInner(BaseModel):
    model_config = ConfigDict(extra="forbid")
    size_um: float
    colour: Literal["ochre", "teal"] = "ochre"

    @field_validator("size_um")
    @classmethod
    def _round(cls, value):
        if value != round(value):
            raise ValueError("must be round")
        return value


class Plain(BaseModel):
    model_config = ConfigDict(extra="forbid")
    inner: PlainInner | None = None
    many: tuple[PlainInner, ...] = ()
    by_name: dict[str, list[PlainInner]] = Field(default_factory=dict)
    pair: tuple[int, int] = (0, 0)

    @model_validator(mode="after")
    def _check(self):
        if self.pair[0] > self.pair[1]:
            raise ValueError("pair must rise")
        return self


def document(folder, text):
    path = folder / "some.yaml"
    path.write_text(text)
    return read_document(path)


def faults(folder, text, model):
    with pytest.raises(InputError) as caught:
        validate_document(document(folder, text), model)
    return [(p.line, p.field, p.rule, p.nearest) for p in caught.value.problems]


def test_good_document(tmp_path):
    text = "name: a\nbranches:\n  - {kind: axon, low: 0.2, width_um: 3}\nbest:\n"
    tree = validate_document(document(tmp_path, text), Tree)
    assert tree.branches == (Branch(kind="axon", low=0.2, width_um=3),)
    assert tree.best is None
    with pytest.raises(ValueError, match="frozen"):
        tree.name = "b"


def test_every_fault_at_once_in_order_of_lines(tmp_path):
    text = """\
count: 11
nmae: x
density_per_mm3: -200
upright: yes
branches:
  - {kind: axonal, width_um: 0}
  - kind: basal
    low: 1
    high: 1
    widht_um: 2
  - 7
named:
  "": {kind: axon}
  good: {width_mm: 3}
best: {kind: 3}
"""
    assert faults(tmp_path, text, Tree) == [
        (1, "name", "is missing", None),
        (1, "count", "= 11 must be <= 10", None),
        (2, "nmae", "is not a known key", "name"),
        (3, "density_per_mm3", "= -200 must be > 0", None),
        (4, "upright", "= 'yes' must be true or false", None),
        (6, "branches.1.kind", "= 'axonal' must be one of axon, basal", "axon"),
        (6, "branches.1.width_um", "= 0 must be > 0", None),
        (7, "branches.2", "says too little", None),
        (9, "branches.2.high", "must differ from low", None),
        (10, "branches.2.widht_um", "is not a known key", "width_um"),
        (11, "branches.3", "= 7 must be 'key: value' lines", None),
        (13, "named.", "= '' must not be empty or begin or end with a blank", None),
        (14, "named.good.kind", "is missing", None),
        (
            14,
            "named.good.width_mm",
            "is not a known key; the unit here is um",
            "width_um",
        ),
        (15, "best.kind", "= 3 must be one of axon, basal", None),
    ]


@pytest.mark.parametrize(
    ("line", "rule", "nearest"),
    [
        ("count: 2.0", "= 2.0 must be a whole number", None),
        ("count: true", "= true must be a whole number", None),
        ("count: '2'", "= '2' must be a whole number", None),
        ("count: [2]", "= a list must be a whole number", None),
        ("count: {a: 2}", "= 'key: value' lines must be a whole number", None),
        ("density_per_mm3: true", "= true must be a number", None),
        ("density_per_mm3: 5 cells", "= '5 cells' must be a number", None),
        ("density_per_mm3: 1,5", "= '1,5' must be a number", None),
        ("density_per_mm3: .nan", "= nan must be a finite number", None),
        ("density_per_mm3: .inf", "= inf must be a finite number", None),
        ("density_per_mm3: 1e999", "= inf must be a finite number", None),
        ("branches: x", "= 'x' must be a list", None),
        ("named: [x]", "= a list must be 'key: value' lines", None),
        ("density_per_um3: 1", "is not a known key; the unit here is per_mm3", "="),
        ("density: 1", "is not a known key; the unit here is per_mm3", "="),
        ("axon_m_per_s: 1", "is not a known key; the unit here is um_per_ms", "="),
        ("axon_mm_per_ms: 1", "is not a known key; the unit here is um_per_ms", "="),
        ("densty_per_mm3: 1", "is not a known key", "="),
    ],
)
def test_wording(tmp_path, line, rule, nearest):
    ((found_line, field, found_rule, found_nearest),) = faults(
        tmp_path, f"name: a\n{line}\n", Tree
    )
    assert (found_line, found_rule) == (2, rule)
    key = line.partition(":")[0]
    if nearest == "=":
        nearest = "axon_um_per_ms" if key.startswith("axon") else "density_per_mm3"
    assert field == key
    assert found_nearest == nearest


def test_key_like_no_other_lists_the_known_ones(tmp_path):
    ((_, field, rule, nearest),) = faults(tmp_path, "name: a\nzzz:\n", Tree)
    assert (field, nearest) == ("zzz", None)
    assert rule.startswith("is not a known key; there are 'name', 'count', 'density_per")


def test_number_where_a_name_belongs(tmp_path):
    ((_, _, rule, _),) = faults(tmp_path, "name: 4\n", Tree)
    assert rule == "= 4 must be text; write it in quotes"


@pytest.mark.parametrize(
    "name", ["L2/3 pyramid", "Körnerzelle", "星形細胞", "a" * 80, "4"]
)
def test_good_names(tmp_path, name):
    text = f'name: "{name}"\n'
    assert validate_document(document(tmp_path, text), Tree).name == name


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("", "must not be empty"),
        (" ", "must not be empty"),
        (" a", "begin or end with a blank"),
        ("a ", "begin or end with a blank"),
        ("a\\nb", "printable"),
        ("a\\tb", "printable"),
        ("a\\u00a0b", "printable"),
        ("a\\u200bb", "printable"),
        ("a" * 81, "has 81 characters; 80 are the most"),
    ],
)
def test_bad_names(tmp_path, name, words):
    ((line, field, rule, _),) = faults(tmp_path, f'name: "{name}"\n', Tree)
    assert (line, field) == (1, "name")
    assert words in rule
    assert rule.isprintable()


def test_long_values_are_cut(tmp_path):
    ((_, _, rule, _),) = faults(tmp_path, f"name: a\ncount: {'x' * 9999}\n", Tree)
    assert len(rule) < 120


def test_plain_models_are_served_too(tmp_path):
    text = """\
inner: {size_um: 1.5, color: teal}
many:
  - {size_mm: 1, colour: teel}
by_name:
  first: [{size_um: a}, {siz_um: 1}]
pair: [1, 2, 3]
"""
    found = faults(tmp_path, text, Plain)
    assert found[:3] == [
        (1, "inner.size_um", "must be round", None),
        (1, "inner.color", "is not a known key", "colour"),
        (3, "many.1.size_um", "is missing", None),
    ]
    assert (
        3,
        "many.1.size_mm",
        "is not a known key; the unit here is um",
        "size_um",
    ) in (found)
    assert (3, "many.1.colour", "= 'teel' must be one of ochre, teal", "teal") in found
    assert (5, "by_name.first.1.size_um", "= 'a' must be a number", None) in found
    assert (5, "by_name.first.2.siz_um", "is not a known key", "size_um") in found
    assert found[-1][:2] == (6, "pair")
    assert faults(tmp_path, "pair: [2, 1]\n", Plain) == [(1, "", "pair must rise", None)]


def test_rules_hold_for_python_callers_as_well():
    with pytest.raises(ValueError, match="must differ from low"):
        Branch(kind="axon", width_um=1, low=1, high=1)
