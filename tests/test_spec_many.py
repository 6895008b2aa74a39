"""Many mistakes at once: all are reported in order, ten are shown."""

import pytest
from builders_spec import RECORDINGS, SPEC, edited, write_spec

from circuitgen.core.errors import InputError
from circuitgen.spec import load_spec

# Passage, what it becomes, and the line of the mistake.
MISTAKES = [
    ("seed: 7", "seed: -7", 2),
    ("shape: cylinder", "shape: tube", 4),
    ("edges: open", "edges: closed", 6),
    ("thickness_um: 300", "thickness_um: .nan", 10),
    ("sign: excitatory", "sign: exciting", 13),
    ("{L23: 60000}", "{L24: 60000}", 14),
    ("upright: y", "upright: up", 16),
    ("soma_radius_um: 7", "soma_radius_um: wide", 17),
    ("[soma, basal, apical]", "[soma, basel]", 18),
    ("      L1: 5", "      L1: -5", 22),
    ("ais_um: 30", "ais: 30", 25),
    ("max_gap_um: 0.5", "max_gap_um: 500", 28),
]


def spoilt(count):
    text = SPEC
    for old, new, _ in MISTAKES[:count]:
        text = edited(text, old, new)
    return text


@pytest.mark.parametrize("count", range(1, len(MISTAKES) + 1))
def test_every_mistake_has_its_line_whatever_else_is_wrong(tmp_path, count):
    with pytest.raises(InputError) as caught:
        load_spec(write_spec(tmp_path, spoilt(count)))
    lines = [problem.line for problem in caught.value.problems]
    assert lines == [line for *_, line in MISTAKES[:count]]


def test_ten_problems_are_shown_and_the_rest_counted(tmp_path):
    table = RECORDINGS.replace("50,4", "50,54")
    with pytest.raises(InputError) as caught:
        load_spec(write_spec(tmp_path, spoilt(12), table))
    problems = caught.value.problems
    assert len(problems) == 13
    assert len({problem.file for problem in problems}) == 2
    order = [(problem.file, problem.line) for problem in problems]
    for file in {file for file, _ in order}:
        lines = [line for name, line in order if name == file]
        assert lines == sorted(lines)
    shown = str(caught.value).split("\n")
    assert shown == [*map(str, problems[:10]), "… and 3 more"]


def test_ten_problems_need_no_count(tmp_path):
    with pytest.raises(InputError) as caught:
        load_spec(write_spec(tmp_path, spoilt(10)))
    assert str(caught.value).count("\n") == 9
    assert "more" not in str(caught.value)
