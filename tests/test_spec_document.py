"""Reading YAML: plain data, exact lines, and one clear message for what is wrong."""

from __future__ import annotations

import math

import pytest
import yaml

from circuitgen.core.errors import InputError
from circuitgen.spec import document as document_module
from circuitgen.spec import read_document


@pytest.fixture(params=["libyaml", "python"])
def parser(request, monkeypatch):
    """Run a test with both parsers: the fast one is not built everywhere."""
    if request.param == "python":
        loader = type(
            "PythonLoader",
            (yaml.SafeLoader,),
            {
                "yaml_implicit_resolvers": (
                    document_module._Loader.yaml_implicit_resolvers
                )
            },
        )
        monkeypatch.setattr(document_module, "_Loader", loader)
    return request.param


def read(folder, content):
    path = folder / "some.yaml"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return read_document(path)


def refused(folder, content):
    with pytest.raises(InputError) as caught:
        read(folder, content)
    return caught.value.problems


def test_data_and_lines(tmp_path, parser):
    text = (
        "# comment\n"
        "name: a\n"
        "layers:\n"
        "  - {name: L1,\n"
        "     thickness_um: 5}\n"
        "  -\n"
        "    name: L2\n"
        "empty:\n"
        "4: x\n"
    )
    document = read(tmp_path, text)
    assert document.data == {
        "name": "a",
        "layers": ({"name": "L1", "thickness_um": 5}, {"name": "L2"}),
        "empty": None,
        "4": "x",
    }
    expected = {
        (): 2,
        ("name",): 2,
        ("layers",): 3,
        ("layers", 0): 4,
        ("layers", 0, "name"): 4,
        ("layers", 0, "thickness_um"): 5,
        ("layers", 1): 7,
        ("layers", 1, "name"): 7,
        ("empty",): 8,
        ("4",): 9,
    }
    assert document.lines == expected
    assert document.line(("layers", 1, "thickness_um", "x")) == 7
    assert document.line(("absent",)) == 2
    assert document.text == text


# Example 10.9 of the YAML 1.2.2 specification (core schema), written from memory, less
# its octal and hexadecimal numbers, which are text here.
@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("null", None),
        ("~", None),
        ("", None),
        ("true", True),
        ("True", True),
        ("false", False),
        ("FALSE", False),
        ("0", 0),
        ("-19", -19),
        ("0.", 0.0),
        ("-0.0", 0.0),
        (".5", 0.5),
        ("+12e03", 12000.0),
        ("-2E+05", -200000.0),
        (".inf", math.inf),
        ("-.Inf", -math.inf),
        ("+.INF", math.inf),
        # What YAML 1.1 would turn into something else.
        ("6e4", 60000.0),
        ("010", 10),
        ("0o7", "0o7"),
        ("0x3A", "0x3A"),
        ("NO", "NO"),
        ("on", "on"),
        ("y", "y"),
        ("1:30", "1:30"),
        ("1_000", "1_000"),
        ("2026-12-01", "2026-12-01"),
        ("=", "="),
        ("'12'", "12"),
        ("nan", "nan"),
        ("!!str 12", "12"),
    ],
)
def test_plain_values(tmp_path, parser, text, value):
    found = read(tmp_path, f"key: {text}\n").data["key"]
    assert found == value
    assert type(found) is type(value)


def test_not_a_number(tmp_path):
    assert math.isnan(read(tmp_path, "key: .NaN\n").data["key"])


@pytest.mark.parametrize("ending", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("mark", ["", "\ufeff"])
def test_line_endings_and_byte_order_mark(tmp_path, parser, ending, mark):
    document = read(tmp_path, mark + ending.join(["a: 1", "b:", "  - 2", "  - 3", ""]))
    assert document.data == {"a": 1, "b": (2, 3)}
    assert document.lines[("b", 1)] == 4


def test_aliases_share_values(tmp_path):
    document = read(tmp_path, "a: &same {x: 1}\nb: *same\n")
    assert document.data == {"a": {"x": 1}, "b": {"x": 1}}
    assert document.lines[("b",)] == 2


def test_every_duplicate_key_with_both_lines(tmp_path, parser):
    text = "a: 1\nb: {x: 1, x: 2}\na: 2\n'a': 3\n"
    found = [(p.line, p.field, p.rule) for p in refused(tmp_path, text)]
    assert found == [
        (2, "b.x", "is given twice, first on line 2"),
        (3, "a", "is given twice, first on line 1"),
        (4, "a", "is given twice, first on line 1"),
    ]


@pytest.mark.parametrize(
    "value",
    [
        "!!python/object/apply:os.system [echo]",
        "!!python/name:os.system",
        "!!binary aGVsbG8=",
        "!!set {x}",
        "!!omap [x: 1]",
        "!mine {x: 1}",
        "!mine 3",
    ],
)
def test_tags_are_refused(tmp_path, parser, value):
    (problem,) = refused(tmp_path, f"a: 1\nb:\n  - {value}\n")
    assert (problem.line, problem.field) == (3, "b.1")
    assert "tag" in problem.rule


def test_tag_that_the_value_does_not_fit(tmp_path):
    (problem,) = refused(tmp_path, "a: 1\nb: !!int five\n")
    assert (problem.line, problem.field, problem.rule) == (
        2,
        "b",
        "cannot be read as int",
    )


def test_number_with_too_many_digits(tmp_path):
    (problem,) = refused(tmp_path, f"a: 1\nb: {'9' * 5000}\n")
    assert (problem.line, problem.field) == (2, "b")


def test_alias_bomb_is_refused_fast(tmp_path, parser):
    lines = ["a0: &a0 [x, x, x, x, x, x, x, x, x, x]"]
    lines += [f"a{i}: &a{i} [{', '.join([f'*a{i - 1}'] * 10)}]" for i in range(1, 20)]
    found = refused(tmp_path, "\n".join(lines))
    assert "more than 200000 values" in found[-1].rule


@pytest.mark.parametrize("text", ["a: &a [*a]\n", "a: &a {b: *a}\n"])
def test_value_that_holds_itself(tmp_path, parser, text):
    (problem,) = refused(tmp_path, text)
    assert problem.line == 1
    assert "nested" in problem.rule


@pytest.mark.parametrize("depth", [41, 990, 20_000])
@pytest.mark.parametrize("brackets", ["[]", "{}"])
def test_deep_nesting(tmp_path, parser, depth, brackets):
    opening = "[" if brackets == "[]" else "{x: "
    closing = brackets[1] * depth
    (problem,) = refused(tmp_path, f"a: {opening * depth}{closing}\n")
    assert "nest" in problem.rule


@pytest.mark.parametrize(
    ("text", "line", "words"),
    [
        ("a: 1\nb:\n\tc: 1\n", 3, "begins with a tab"),
        ("a: 1\nb: c: 2\n", 2, "not valid YAML"),
        ("a: 1\nb: 'open\nc: 2\n", 4, "line 2"),
        ("a: [1,\nb: 2\n", 3, "that begins on line 1"),
        ("a: 1\n b: 2\n", 2, "not valid YAML"),
        ("a: *unknown\n", 1, "not valid YAML"),
        ("a: 1\n---\nb: 2\n", 2, "not valid YAML"),
        ("a: 1\nb: @x\n", 2, "not valid YAML"),
        ("a: 1\n? [x, y]\n: 2\n", 2, "not a plain name"),
        ("- a\n- b\n", 1, "not a list"),
        ("# first\njust text\n", 2, "not a single value"),
        ("a: 1\nb: \x07\n", 2, "unprintable character U+0007"),
    ],
)
def test_syntax_gives_one_problem_with_its_line(tmp_path, text, line, words):
    (problem,) = refused(tmp_path, text)
    assert problem.line == line
    assert words in problem.rule
    assert problem.file == str(tmp_path / "some.yaml")


@pytest.mark.parametrize("text", ["", "\n\n", "# only a comment\n", "---\n", "\ufeff"])
def test_empty(tmp_path, parser, text):
    (problem,) = refused(tmp_path, text)
    assert "is empty" in problem.rule or "single value" in problem.rule


@pytest.mark.parametrize(
    ("content", "line"),
    [
        ("a: 1\nb: caf\xe9\n".encode("latin-1"), 2),
        ("a: 1\n".encode("utf-16"), 1),
        (b"PK\x03\x04" + bytes(range(256)), 2),  # byte 10 ends the first line
    ],
)
def test_other_encodings(tmp_path, content, line):
    (problem,) = refused(tmp_path, content)
    assert problem.line == line
    assert "UTF-8" in problem.rule or "unprintable" in problem.rule


def test_file_absent_or_folder(tmp_path):
    for path, words in (
        (tmp_path / "none.yaml", "does not exist"),
        (tmp_path, "is a folder"),
        (tmp_path / "none.yaml" / "x", "does not exist"),
        (tmp_path / "nul\0byte", "cannot be read"),
    ):
        with pytest.raises(InputError) as caught:
            read_document(path)
        (problem,) = caught.value.problems
        assert words in problem.rule
        assert problem.file == str(path)
