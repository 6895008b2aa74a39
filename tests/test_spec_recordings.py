"""Recordings as CSV file or inline list: the same rules, the right line either way."""

from __future__ import annotations

import csv
import io
import json

import pandas as pd
import pytest
from builders_spec import RECORDINGS, SPEC, edited, load, problems

from circuitgen.spec import RECORDING_COLUMNS

# The columns of the file format, in order.
PUBLISHED_COLUMNS = (
    "source, pre_type, post_type, tested_n, connected_n, probability, "
    "distance_low_um, distance_high_um, distance_kind, slice_thickness_um, "
    "soma_depth_low_um, soma_depth_high_um, synapses_mean, synapses_sd, "
    "synapses_pairs_n, reciprocal_tested_n, reciprocal_connected_n, cluster_size, use"
).split(", ")

FULL_ROW = {
    "source": "Invented et al., 2026",
    "pre_type": "L23_pyramidal",
    "post_type": "L23_all",
    "tested_n": 50,
    "connected_n": 4,
    "distance_low_um": 0,
    "distance_high_um": 100.5,
    "distance_kind": "lateral",
    "slice_thickness_um": 300,
    "soma_depth_low_um": 40,
    "soma_depth_high_um": 90,
    "synapses_mean": 2.5,
    "synapses_sd": 1.25,
    "synapses_pairs_n": 4,
    "reciprocal_tested_n": 20,
    "reciprocal_connected_n": 1,
    "cluster_size": 4,
    "use": "audit",
}
LEAST_ROW = {"pre_type": "L23_basket", "post_type": "L23_basket", "probability": 0.25}


def as_csv(*rows: dict) -> str:
    text = io.StringIO(newline="")
    writer = csv.DictWriter(text, PUBLISHED_COLUMNS, lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    return text.getvalue()


def as_inline(*rows: dict) -> str:
    """Return the good spec with an inline list of recordings from line 30 onward."""
    lines = "".join(f"  - {json.dumps(row)}\n" for row in rows)
    return edited(SPEC, "recordings: recordings.csv\n", f"recordings:\n{lines}")


def faults(folder, *rows: dict) -> list[tuple[int, str]]:
    """Return the data row and the words of every fault; the same both ways."""
    by_csv = problems(folder, recordings=as_csv(*rows))
    assert {one.file for one in by_csv} == {str(folder / "recordings.csv")}
    # No cell of these rows has a line break, so that row n stands on line n + 1.
    found = [(one.line - 1, str(one).split(": ", 1)[1]) for one in by_csv]
    inline = problems(folder, as_inline(*rows))
    assert {one.file for one in inline} == {str(folder / "spec.yaml")}
    same = []
    for one in inline:
        number = one.line - 29
        words = str(one).split(": ", 1)[1]
        assert words.startswith(f"recordings.{number}")
        same.append((number, words.removeprefix(f"recordings.{number}").lstrip(" .")))
    assert sorted(found) == sorted(same)
    return found


def test_columns_are_the_published_ones():
    assert list(RECORDING_COLUMNS) == PUBLISHED_COLUMNS


@pytest.mark.parametrize("way", ["csv", "inline"])
def test_full_and_least_row(tmp_path, way):
    if way == "csv":
        spec = load(tmp_path, recordings=as_csv(FULL_ROW, LEAST_ROW))
        place, first = tmp_path / "recordings.csv", 2
    else:
        spec = load(tmp_path, as_inline(FULL_ROW, LEAST_ROW))
        place, first = tmp_path / "spec.yaml", 30
        assert tmp_path / "recordings.csv" not in spec.input_files
    full, least = spec.recordings
    for column in PUBLISHED_COLUMNS:
        assert getattr(full, column) == FULL_ROW.get(column)
    assert isinstance(full.tested_n, int)
    assert isinstance(full.distance_low_um, float)
    assert full.measured_probability == 4 / 50
    assert full.window_um() == (0, 100.5)
    blank = dict.fromkeys(PUBLISHED_COLUMNS)
    defaults = {"source": "", "distance_kind": "soma", "use": "fit"}
    for column, value in {**blank, **defaults, **LEAST_ROW}.items():
        assert getattr(least, column) == value
    assert least.measured_probability == 0.25
    assert least.window_um() == (0, float("inf"))
    for number, recording in enumerate(spec.recordings):
        place_found = (recording.row, recording.file, recording.line)
        assert place_found == (number + 1, str(place), first + number)


CONTRADICTIONS = [
    ({"tested_n": 5}, "connected_n is missing; tested_n needs it"),
    ({"connected_n": 5}, "tested_n is missing; connected_n needs it"),
    (
        {"tested_n": 5, "connected_n": 6},
        "connected_n = 6 must be <= tested_n = 5",
    ),
    ({"tested_n": 0, "connected_n": 0}, "tested_n = 0 must be >= 1"),
    ({"tested_n": 5, "connected_n": -1}, "connected_n = -1 must be >= 0"),
    ({"tested_n": 5.5, "connected_n": 1}, "tested_n = 5.5 must be a whole number"),
    (
        {"tested_n": 10**10, "connected_n": 1},
        "tested_n = 10000000000 must be <= 1000000000",
    ),
    ({"probability": 1.1}, "probability = 1.1 must be <= 1"),
    ({"probability": -0.1}, "probability = -0.1 must be >= 0"),
    ({"probability": "10 %"}, "probability = '10 %' must be a number"),
    (
        {"tested_n": 50, "connected_n": 5, "probability": 0.1},
        "probability is given beside tested_n; keep the counts or the probability",
    ),
    (
        {"probability": 0, "synapses_mean": 2},
        "synapses_mean is given although probability = 0 says that there is no "
        "connection",
    ),
    (
        {"distance_low_um": 50, "distance_high_um": 50},
        "distance_low_um = 50 must be < distance_high_um = 50",
    ),
    ({"distance_low_um": -1}, "distance_low_um = -1 must be >= 0"),
    ({"distance_high_um": 0}, "distance_high_um = 0 must be > 0"),
    (
        {"distance_kind": "laterally"},
        "distance_kind = 'laterally' must be one of soma, lateral "
        "(did you mean 'lateral'?)",
    ),
    ({"slice_thickness_um": 0}, "slice_thickness_um = 0 must be > 0"),
    (
        {"slice_thickness_um": 300, "soma_depth_low_um": 40},
        "soma_depth_high_um is missing; soma_depth_low_um needs it",
    ),
    (
        {"slice_thickness_um": 300, "soma_depth_low_um": 91, "soma_depth_high_um": 90},
        "soma_depth_low_um = 91 must be <= soma_depth_high_um = 90",
    ),
    (
        {"slice_thickness_um": 80, "soma_depth_low_um": 40, "soma_depth_high_um": 90},
        "soma_depth_high_um = 90 must be <= slice_thickness_um = 80",
    ),
    (
        {"soma_depth_low_um": 40, "soma_depth_high_um": 90},
        "slice_thickness_um is missing; soma_depth_low_um needs it",
    ),
    ({"synapses_mean": 0.9}, "synapses_mean = 0.9 must be >= 1"),
    ({"synapses_mean": 2, "synapses_sd": -1}, "synapses_sd = -1 must be >= 0"),
    ({"synapses_sd": 1}, "synapses_mean is missing; synapses_sd needs it"),
    ({"synapses_pairs_n": 4}, "synapses_mean is missing; synapses_pairs_n needs it"),
    (
        {"synapses_mean": 2, "synapses_pairs_n": 0},
        "synapses_pairs_n = 0 must be >= 1",
    ),
    (
        {"synapses_mean": 2, "synapses_sd": 0, "synapses_pairs_n": 1},
        "synapses_pairs_n = 1 must be >= 2, since synapses_sd is given",
    ),
    (
        {"synapses_mean": 1, "synapses_sd": 0.5},
        "synapses_sd = 0.5 must be 0 when synapses_mean is 1, the least",
    ),
    (
        {"reciprocal_tested_n": 5},
        "reciprocal_connected_n is missing; reciprocal_tested_n needs it",
    ),
    (
        {"reciprocal_tested_n": 5, "reciprocal_connected_n": 6},
        "reciprocal_connected_n = 6 must be <= reciprocal_tested_n = 5",
    ),
    ({"use": "fitt"}, "use = 'fitt' must be one of fit, audit (did you mean 'fit'?)"),
    (
        {"pre_type": "L23_piramidal"},
        "pre_type = 'L23_piramidal' is not a cell type or group of the spec "
        "(did you mean 'L23_pyramidal'?)",
    ),
    (
        {"post_type": "L23-all"},
        "post_type = 'L23-all' is not a cell type or group of the spec "
        "(did you mean 'L23_all'?)",
    ),
    (
        {"post_type": "granule"},
        "post_type = 'granule' is not a cell type or group of the spec; "
        "there are 'L23_pyramidal', 'L23_basket', 'L23_all'",
    ),
    ({"pre_type": None}, "pre_type is missing"),
]
MEASURES = ("tested_n", "connected_n", "probability", "synapses_", "reciprocal_")


@pytest.mark.parametrize(("columns", "words"), CONTRADICTIONS)
def test_rows_that_are_wrong(tmp_path, columns, words):
    row = {"pre_type": "L23_basket", "post_type": "L23_all", **columns}
    if not any(name.startswith(MEASURES) for name in columns):
        row["probability"] = 0.5
    good = {**LEAST_ROW}
    assert faults(tmp_path, good, row, good) == [(2, words)]


def test_a_row_that_measures_nothing(tmp_path):
    row = {**FULL_ROW}
    for name in PUBLISHED_COLUMNS:
        if name.startswith(MEASURES):
            row.pop(name, None)
    expected = "measures nothing: give counts, a probability or synapses"
    assert faults(tmp_path, row) == [(1, expected)]


@pytest.mark.parametrize(
    "columns",
    [
        {"synapses_mean": 1, "synapses_sd": 0},
        {"synapses_mean": 2.5},
        {"synapses_mean": 2.5, "synapses_pairs_n": 1},
        {"reciprocal_tested_n": 5, "reciprocal_connected_n": 0},
        {"tested_n": 5, "connected_n": 5},
        {"tested_n": 5, "connected_n": 0, "distance_low_um": 30},
        {"probability": 0, "distance_high_um": 30},
        {"probability": 1, "slice_thickness_um": 300},
    ],
)
def test_rows_that_are_right(tmp_path, columns):
    row = {"pre_type": "L23_basket", "post_type": "L23_all", **columns}
    (by_csv,) = load(tmp_path, recordings=as_csv(row)).recordings
    (inline,) = load(tmp_path, as_inline(row)).recordings
    for name in PUBLISHED_COLUMNS:
        assert getattr(by_csv, name) == getattr(inline, name)


def test_all_faults_of_all_rows(tmp_path):
    rows = [
        {"pre_type": "L23_bask", "post_type": "L23_all", "probability": 2},
        LEAST_ROW,
        {"pre_type": "L23_basket", "post_type": "L23", "tested_n": 3, "use": "no"},
    ]
    found = faults(tmp_path, *rows)
    assert [number for number, _ in found] == [1, 1, 3, 3, 3]
    assert {words.split()[0] for _, words in found} == {
        "probability",
        "pre_type",
        "connected_n",
        "use",
        "post_type",
    }


def test_inline_rows_know_the_lines_of_their_fields(tmp_path):
    text = edited(
        SPEC,
        "recordings: recordings.csv\n",
        "recordings:\n"
        "  - pre_type: L23_basket\n"
        "    post_typ: L23_all\n"
        "    post_type: L23_all\n"
        "    tested_n: 5\n"
        "    connected_n: 6\n"
        "    row: 3\n"
        "    line: 3\n",
    )
    found = [(one.line, one.field, one.nearest) for one in problems(tmp_path, text)]
    assert found == [
        (31, "recordings.1.post_typ", "post_type"),
        (34, "recordings.1.connected_n", None),
        (35, "recordings.1.row", None),
        (36, "recordings.1.line", None),
    ]


def test_inline_rows_are_not_typed_from_text(tmp_path):
    text = as_inline({**LEAST_ROW, "probability": "0.5"})
    (problem,) = problems(tmp_path, text)
    assert problem.rule == "= '0.5' must be a number"


def csv_faults(folder, table: str | bytes) -> list[str]:
    found = problems(folder, recordings=table)
    return [str(one).replace(f"{folder}/recordings.csv:", "") for one in found]


@pytest.mark.parametrize(
    ("header", "expected"),
    [
        (
            "pre_type,post_type,tested_n,conected_n",
            ["1: conected_n is not a known column (did you mean 'connected_n'?)"],
        ),
        (
            "pre_type,post_type,tested_n,connected_n,distance_low_mm",
            [
                "1: distance_low_mm is not a known column; the unit here is um "
                "(did you mean 'distance_low_um'?)"
            ],
        ),
        (
            "pre_type,post_type,pre_type,Use",
            [
                "1: pre_type is column 1 and column 3",
                "1: Use is not a known column (did you mean 'use'?)",
            ],
        ),
        ("pre_type,post_type,,use", ["1: column 3 has no name"]),
        (
            "source,tested_n,connected_n",
            ["1: pre_type column is missing", "1: post_type column is missing"],
        ),
        (
            "pre_type;post_type;tested_n",
            ["1: columns must be separated by commas, not by semicolons"],
        ),
        (
            "pre_type\tpost_type\ttested_n",
            ["1: columns must be separated by commas, not by tabs"],
        ),
    ],
)
def test_headers_that_are_wrong(tmp_path, header, expected):
    assert csv_faults(tmp_path, f"{header}\nx,y,5,6\nx;y;5;6\n") == expected


HEAD = "pre_type,post_type,tested_n,connected_n,source\n"


@pytest.mark.parametrize(
    ("table", "expected"),
    [
        (
            HEAD + "L23_basket,L23_all,5,3,a,b\n",
            ["2: has 6 values for 5 columns"],
        ),
        (
            HEAD + 'L23_basket,L23_all,"5,0",3\n',
            ["2: tested_n = '5,0' must be a whole number"],
        ),
        (
            HEAD + "L23_basket,L23_all,nan,inf\n",
            [
                "2: tested_n = 'nan' must be a whole number",
                "2: connected_n = 'inf' must be a whole number",
            ],
        ),
        (
            HEAD + "L23_basket,L23_all,1_0,3\n",
            ["2: tested_n = '1_0' must be a whole num*"],
        ),
        (HEAD + "L23_basket,L23_all,1e999,3\n", ["2: tested_n = inf must be a whole *"]),
        (
            HEAD + "L23_basket,L23_all,٣,3\n",
            ["2: tested_n = '٣' must be a whole number"],
        ),
        (
            HEAD + 'L23_basket,L23_all,"5,3\n',
            ["2: is not valid CSV: unexpected end of d*"],
        ),
        (HEAD + "\n" + 'L23_basket,"L23_all"x,5,3\n', ["3: is not valid CSV: ',' exp*"]),
        ("# only a comment\n\n", [" is empty"]),
        ("", [" is empty"]),
        (b"pre_type,post_type\ncaf\xe9,b\n", ["2: is not UTF-8 text: byte 0xe9; *"]),
        ("a\0b", ["1: has the unprintable character U+0000; is it text?"]),
    ],
)
def test_tables_that_are_wrong(tmp_path, table, expected):
    found = csv_faults(tmp_path, table)
    assert len(found) == len(expected)
    for one, words in zip(found, expected, strict=True):
        assert one.startswith(words[:-1]) if words[-1] == "*" else one == words


def test_faults_before_a_broken_quote_are_kept(tmp_path):
    table = HEAD + "L23_basket,L23_all,5,6\n" + 'L23_basket,L23_all,"5,3\n'
    found = csv_faults(tmp_path, table)
    assert [one.split(":")[0] for one in found] == ["2", "3"]


@pytest.mark.parametrize("ending", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("mark", ["", "\ufeff"])
def test_lines_are_counted_whatever_lies_between(tmp_path, ending, mark):
    lines = [
        "# invented numbers",
        "pre_type, post_type ,tested_n,connected_n,source,,",
        "",
        'L23_basket,L23_all,5,3,"two',
        '# lines",,',
        ",,,,,,",
        '# a comment with a " in it, and ,,,,,,,,, commas',
        "L23_basket , L23_basket,6.0,3,#1,,",
        "L23_basket,L23_basket,7,3",
        "",
    ]
    spec = load(tmp_path, recordings=mark + ending.join(lines))
    assert [one.line for one in spec.recordings] == [4, 8, 9]
    assert [one.row for one in spec.recordings] == [1, 2, 3]
    assert [one.tested_n for one in spec.recordings] == [5, 6, 7]
    assert spec.recordings[0].source.split() == ["two", "#", "lines"]
    assert spec.recordings[1].source == "#1"


def test_no_rows(tmp_path):
    assert load(tmp_path, recordings=HEAD).recordings == ()
    text = edited(SPEC, "recordings: recordings.csv", "recordings: []")
    assert load(tmp_path, text).recordings == ()


def test_a_table_written_by_pandas(tmp_path):
    """An independent writer: columns of counts with blanks come out as 50.0."""
    frame = pd.DataFrame([FULL_ROW, LEAST_ROW], columns=PUBLISHED_COLUMNS)
    table = frame.to_csv(index=False)
    assert "50.0" in table
    full, least = load(tmp_path, recordings=table).recordings
    for column in PUBLISHED_COLUMNS:
        assert getattr(full, column) == FULL_ROW.get(column)
    assert (least.tested_n, least.probability) == (None, 0.25)


def test_types_are_not_checked_where_there_are_none(tmp_path):
    text = SPEC[: SPEC.index("cell_types:")] + "recordings: recordings.csv\n"
    (problem,) = problems(tmp_path, text)
    assert (problem.field, problem.rule) == ("cell_types", "is missing")


def test_names_with_any_letters(tmp_path):
    text = SPEC.replace("L23_basket:", '"Körbchen, L2/3":')
    text = text.replace("L23_basket]", '"Körbchen, L2/3"]')
    table = edited(RECORDINGS, "L23_basket,", '"Körbchen, L2/3",')
    spec = load(tmp_path, text, table)
    assert spec.recordings[1].pre_type == "Körbchen, L2/3"
    assert spec.members("Körbchen, L2/3") == (1,)
