"""Reading YAML with lines: what is accepted, and what is refused with its place."""

import pytest
import yaml
from pydantic import BaseModel, ConfigDict

from circuitgen.core.errors import InputError
from circuitgen.spec import read_document, validate_document


class Inner(BaseModel):
    model_config = ConfigDict(extra="forbid", strict=True)

    width_um: float
    label: str = ""


class Outer(BaseModel):
    model_config = ConfigDict(extra="forbid", strict=True)

    first: Inner
    rows: tuple[Inner, ...] = ()
    named: dict[str, Inner] = {}


def written(tmp_path, content):
    path = tmp_path / "file.yaml"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


def only_problem(path):
    with pytest.raises(InputError) as caught:
        read_document(path)
    (problem,) = caught.value.problems
    assert problem.file == str(path)
    return problem


REFUSED = {
    "duplicate key": ("a: 1\nb: 2\na: 3\n", 3, "a", "is given twice (first on line 1)"),
    "inner duplicate": ("a:\n  b: 1\n  b: 1\n", 3, "a.b", "(first on line 2)"),
    "duplicate in a list": ("a:\n- b: 1\n  b: 2\n", 3, "a.0.b", "is given twice"),
    "tab": ("a:\n\tb: 1\n", 2, "", "is not valid YAML"),
    "open bracket": ("a: [1, 2\nb: 3\n", 2, "", "is not valid YAML"),
    "two documents": ("a: 1\n---\nb: 2\n", 2, "", "is not valid YAML"),
    "unknown alias": ("a: *nobody\n", 1, "", "undefined alias"),
    "call": ("a: 1\nb: !!python/object/apply:os.getcwd []\n", 2, "b", "tag"),
    "call as mapping": ("a: 1\nb: !!python/object:os.x {c: 1}\n", 2, "b", "tag"),
    "name of a class": ("a: !!python/name:os.system ''\n", 1, "a", "tag"),
    "own tag": ("a: !mine 3\n", 1, "a", "!mine"),
    "wrong number": ("a: !!int three\n", 1, "a", "tag"),
    "list as key": ("a: 1\n[1, 2]: 3\n", 2, "", "a key that is not a plain name"),
    "impossible date": ("a: 2024-13-45\n", 1, "a", "tag"),
    "empty": ("", 1, "", "is empty"),
    "only comments": ("# nothing\n\n", 1, "", "is empty"),
    "list at the top": ("- a\n- b\n", 1, "", "must hold 'key: value' lines"),
    "text at the top": ("just words\n", 1, "", "must hold 'key: value' lines"),
    "not UTF-8": (b"a: 1\nb: \xe9\n", None, "", "is not UTF-8 text (byte 8)"),
    "UTF-16": ("a: 1\n".encode("utf-16"), None, "", "is not UTF-8 text (byte 0)"),
    "control character": ("a: 1\nb: \x07\n", 2, "", "is not valid YAML"),
    "merge": ("a: &x {b: 1}\nc:\n  <<: *x\n", 3, "c.<<", "is not supported"),
    "merge among names": ("a: &x {b: 1}\n<<: *x\n", 2, "<<", "write the fields out"),
    "itself inside": ("a: &x [*x]\n", 1, "", "is nested too deep"),
    "too deep": ("a: " + "[" * 5000 + "]" * 5000, 1, "", "is nested too deep"),
}


@pytest.mark.parametrize("case", REFUSED)
def test_files_are_refused_with_line_and_field(tmp_path, case):
    content, line, field, words = REFUSED[case]
    problem = only_problem(written(tmp_path, content))
    assert (problem.line, problem.field) == (line, field)
    assert words in problem.rule


def test_absent_files_and_folders_are_named(tmp_path):
    assert only_problem(tmp_path / "absent.yaml").rule == "does not exist"
    assert only_problem(tmp_path).rule == "is a folder; a file is needed"


def test_a_short_file_that_unfolds_without_end_is_refused(tmp_path):
    rows = ["a0: &a0 [1, 1, 1, 1, 1, 1, 1, 1, 1, 1]"]
    rows += [f"a{i}: &a{i} [{', '.join([f'*a{i - 1}'] * 10)}]" for i in range(1, 12)]
    assert (
        "more than 200000 fields"
        in only_problem(written(tmp_path, "\n".join(rows))).rule
    )


def test_all_duplicates_and_tags_are_reported_at_once(tmp_path):
    path = written(tmp_path, "a: 1\na: 2\nb: !x 1\nc: {d: 1, d: 2}\n")
    with pytest.raises(InputError) as caught:
        read_document(path)
    assert [p.line for p in caught.value.problems] == [2, 3, 4]


def test_every_field_knows_its_line(tmp_path):
    text = "# comment\na: 1\n\nb:\n- c: 2\n  d:\n    e: 3\n- 4\n"
    document = read_document(written(tmp_path, text))
    expected = {
        ("a",): 2,
        ("b",): 4,
        ("b", 0, "c"): 5,
        ("b", 0, "d"): 6,
        ("b", 0, "d", "e"): 7,
        ("b", 1): 8,
    }
    assert {place: document.line(place) for place in expected} == expected
    assert document.line(("b", 0, "absent", 3)) == 5
    assert document.line(("absent",)) == 2


# The same files by the reference library, for what its safe loader also reads.
SAME = ["a: 1", "a: {b: [1, x, null]}", "a: 'é'", "a: true", "a: 1.5e+3", "a: .inf"]


@pytest.mark.parametrize("text", SAME)
@pytest.mark.parametrize("ending", ["\n", "\r\n"])
@pytest.mark.parametrize("mark", ["", "\N{ZERO WIDTH NO-BREAK SPACE}"])
def test_plain_values_are_those_of_the_reference_library(tmp_path, text, ending, mark):
    def plain(value):
        if isinstance(value, dict):
            return {key: plain(inner) for key, inner in value.items()}
        return [plain(v) for v in value] if isinstance(value, list | tuple) else value

    document = read_document(written(tmp_path, mark + text + ending))
    assert plain(document.data) == yaml.safe_load(text)


@pytest.mark.parametrize(
    ("text", "value"), [("6e4", 6e4), ("-1E-3", -1e-3), (".5e2", 50.0), ("1.e1", 10.0)]
)
def test_scientific_notation_is_a_number_without_point_or_sign(tmp_path, text, value):
    document = read_document(written(tmp_path, f"a: {text}\n"))
    assert document.data["a"] == value
    assert isinstance(document.data["a"], float)


VALIDATED = {
    "unknown": ("first: {width_um: 1.0}\nrowz: 1\n", 2, "rowz", "not a known", "rows"),
    "unknown inside": (
        "first:\n  width_um: 1.0\n  labell: a\n",
        3,
        "first.labell",
        "is not a known key",
        "label",
    ),
    "unknown in a list": (
        "first: {width_um: 1.0}\nrows:\n- width_um: 1.0\n- width: 2.0\n  width_um: 1.\n",
        4,
        "rows.1.width",
        "is not a known key",
        "width_um",
    ),
    "unknown under a name": (
        "first: {width_um: 1.0}\nnamed:\n  x:\n    width_um: 1.0\n    lable: a\n",
        5,
        "named.x.lable",
        "is not a known key",
        "label",
    ),
    "missing": ("rows: []\n", 1, "first", "is missing", None),
    "missing inside": (
        "named: {}\nfirst:\n  label: a\n",
        2,
        "first.width_um",
        "is missing",
        None,
    ),
    "text": ("first: {width_um: wide}\n", 1, "first.width_um", "'wide' must be", None),
    "long value": (
        f"first: {{width_um: {'w' * 500}}}\n",
        1,
        "first.width_um",
        "www… must be a number",
        None,
    ),
    "nothing": ("first:\n", 1, "first", "= nothing must be a group", None),
    "list": ("first: [1]\n", 1, "first", "must be a group of 'key: value'", None),
    "no list": (
        "first: {width_um: 1.0}\nrows: {a: 1}\n",
        2,
        "rows",
        "must be a list",
        None,
    ),
}


@pytest.mark.parametrize("case", VALIDATED)
def test_validation_names_line_field_rule_and_nearest_name(tmp_path, case):
    text, line, field, words, nearest = VALIDATED[case]
    document = read_document(written(tmp_path, text))
    with pytest.raises(InputError) as caught:
        validate_document(document, Outer)
    (problem,) = caught.value.problems
    assert (problem.line, problem.field, problem.nearest) == (line, field, nearest)
    assert words in problem.rule


def test_values_are_shown_without_control_characters(tmp_path):
    path = written(tmp_path, 'first: {width_um: "\\e[31m"}\n')
    with pytest.raises(InputError) as caught:
        validate_document(read_document(path), Outer)
    assert str(caught.value).isprintable()
