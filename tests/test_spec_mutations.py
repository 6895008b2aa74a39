"""Any change of a good spec gives a spec or an InputError, never another exception."""

from __future__ import annotations

import copy
import tempfile
from pathlib import Path

import pytest
import yaml
from builders_spec import RECORDINGS, SPEC, write_spec
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from circuitgen.core.errors import InputError
from circuitgen.spec import Spec, load_spec

INLINE = SPEC.replace(
    "recordings: recordings.csv",
    "recordings:\n"
    "  - {pre_type: L23_basket, post_type: L23_all, tested_n: 5, connected_n: 1}\n"
    "  - {pre_type: L23_all, post_type: L23_all, probability: 0.5, synapses_mean: 2,\n"
    "     synapses_sd: 1, slice_thickness_um: 300, soma_depth_low_um: 40,\n"
    "     soma_depth_high_um: 90, reciprocal_tested_n: 4, reciprocal_connected_n: 1}",
)
TREE = yaml.safe_load(INLINE)

junk = st.recursive(
    st.one_of(
        st.none(),
        st.booleans(),
        st.integers(),
        st.integers(min_value=-(10**30), max_value=10**30),
        st.floats(),
        st.text(max_size=12),
        st.sampled_from(
            ["", "*", "**", "/", "..", "[", "~", "\0", "L23", "L23_all", "box", "mesh"]
        ),
        st.dates(),
    ),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3),
        st.dictionaries(st.text(max_size=5), inner, max_size=3),
    ),
    max_leaves=6,
)


def places(value, here=()):
    """Yield the way to every value of a tree, the tree itself left out."""
    items = value.items() if isinstance(value, dict) else enumerate(value)
    for key, child in items:
        yield (*here, key)
        if isinstance(child, dict | list):
            yield from places(child, (*here, key))


PLACES = list(places(TREE))


@st.composite
def spoilt(draw):
    """Draw one to three changes of the good spec: delete, rename, replace, add."""
    tree = copy.deepcopy(TREE)
    for _ in range(draw(st.integers(1, 3))):
        *way, last = draw(st.sampled_from(PLACES))
        parent = tree
        for key in way:
            try:
                parent = parent[key]
            except (KeyError, IndexError, TypeError):
                break
        action = draw(st.sampled_from(["delete", "rename", "replace", "add"]))
        if isinstance(parent, list) and parent:
            index = min(last, len(parent) - 1) if isinstance(last, int) else 0
            if action == "delete":
                del parent[index]
            else:
                parent[index] = draw(junk)
        elif isinstance(parent, dict):
            value = parent.get(last)
            if action in ("delete", "rename"):
                parent.pop(last, None)
            if action == "rename":
                parent[draw(st.text(max_size=8)) or str(last)[1:]] = value
            elif action == "replace":
                parent[last] = draw(junk)
            elif action == "add":
                parent[draw(st.text(max_size=8))] = draw(junk)
    return yaml.safe_dump(tree, allow_unicode=True, sort_keys=False)


def check_problem(problem):
    lines_n = len(Path(problem.file).read_bytes().splitlines())
    assert problem.line is None or 1 <= problem.line <= lines_n + 1
    assert problem.rule
    assert len(str(problem)) < 2000


def spec_or_problems(text: str | bytes, recordings: str | bytes = RECORDINGS):
    """Load; return a Spec, or the problems after a look at each of them."""
    with tempfile.TemporaryDirectory() as folder:
        path = write_spec(Path(folder), text, recordings)
        try:
            return load_spec(path)
        except InputError as error:
            problems = error.problems
        for problem in problems:
            check_problem(problem)
        assert problems
        return problems


fuzz = settings(
    max_examples=250,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.too_slow],
)


@fuzz
@given(spoilt())
def test_spoilt_trees(text):
    spec_or_problems(text)


@fuzz
@given(st.data())
def test_spoilt_text(data):
    """Cut, double or overwrite a passage of the text, in bytes."""
    text = INLINE.encode()
    begin = data.draw(st.integers(0, len(text)))
    end = data.draw(st.integers(begin, min(len(text), begin + 40)))
    middle = data.draw(
        st.one_of(
            st.just(b""),
            st.just(text[begin:end] * 2),
            st.binary(max_size=8),
            st.text(max_size=8).map(str.encode),
            st.sampled_from([b"\t", b"&a ", b"*a", b"!!x ", b": ", b"- ", b"{", b"]"]),
        )
    )
    spec_or_problems(text[:begin] + middle + text[end:])


@fuzz
@given(st.data())
def test_spoilt_table(data):
    """Cut, double or overwrite a passage of the recordings."""
    table = RECORDINGS
    begin = data.draw(st.integers(0, len(table)))
    end = data.draw(st.integers(begin, min(len(table), begin + 30)))
    middle = data.draw(
        st.one_of(
            st.just(""),
            st.just(table[begin:end] * 2),
            st.text(max_size=8),
            st.sampled_from(['"', "\n", ",", ",,", ";", "\r", "nan", "-1", "1e400"]),
        )
    )
    spec_or_problems(SPEC, (table[:begin] + middle + table[end:]).encode())


@settings(fuzz, max_examples=100)
@given(st.binary(max_size=300), st.binary(max_size=300))
def test_any_bytes(text, table):
    spec_or_problems(text)
    spec_or_problems(SPEC, table)


@pytest.mark.parametrize("place", [place for place in PLACES if len(place) <= 5])
def test_every_key_deleted_renamed_and_nulled(place):
    for action in ("delete", "rename", "nothing", "text", "list", "mapping", "negative"):
        tree = copy.deepcopy(TREE)
        parent = tree
        for key in place[:-1]:
            parent = parent[key]
        last = place[-1]
        value = parent[last]
        if action in ("delete", "rename"):
            del parent[last]
        if action == "rename" and isinstance(parent, dict):
            parent[f"{last}x"] = value
        values = {"nothing": None, "text": "x", "list": ["x"], "mapping": {"x": 1}}
        if action in values or action == "negative":
            parent[last] = values.get(action, -1)
        outcome = spec_or_problems(yaml.safe_dump(tree, sort_keys=False))
        if action == "rename" and isinstance(parent, dict) and place[0] != "groups":
            # Free names may be renamed where nothing refers to them by name.
            assert not isinstance(outcome, Spec)


def test_the_tree_itself_is_good():
    assert isinstance(spec_or_problems(INLINE), Spec)
    assert isinstance(spec_or_problems(yaml.safe_dump(TREE, sort_keys=False)), Spec)
