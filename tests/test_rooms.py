"""Which room may import which: the table of rooms, held against every import."""

from __future__ import annotations

import ast
import importlib
from pathlib import Path

import numba
import pytest
from numba.core.dispatcher import Dispatcher

import circuitgen

PACKAGE = Path(circuitgen.__file__).resolve().parent
ROOMS = {
    "core": set(),
    "spec": {"core"},
    "morphology": {"core", "spec"},
    "inspection": {"core", "spec", "morphology"},
    "column": {"core", "spec", "morphology"},
    "appositions": {"core", "spec", "morphology"},
    "wiring": {"core", "spec"},
    "prediction": {"core", "spec", "column", "appositions", "wiring", "run"},
    "audit": {"core", "spec", "column", "appositions", "run"},
    "export": {"core", "spec"},
    "report": {"core", "spec", "morphology"},
}
EVERY_ROOM = {*ROOMS, "run", "commands"}
ROOMS["run"] = {"core", "spec", "morphology", "column", "appositions", "wiring"}
ROOMS["run"] |= {"report"}
ROOMS["commands"] = EVERY_ROOM
# Modules that other rooms may import past the door.
OPEN_MODULES = {"circuitgen.morphology.arbor", "circuitgen.commands.arguments"}
COMPILED = {"core/draws.py", "core/compilation.py"}
MODULES = sorted(PACKAGE.rglob("*.py"))


def _is_compiled(name):
    """Tell whether a module of the package may hold compiled code."""
    return name in COMPILED or name.endswith("kernels.py")


def _name(path):
    return path.relative_to(PACKAGE).as_posix()


def _exported(door):
    """Return the names that a door's `__all__` lists; empty for other modules."""
    for node in ast.parse(door.read_text("utf-8")).body if door.is_file() else ():
        if isinstance(node, ast.Assign) and node.targets[0].id == "__all__":
            return set(ast.literal_eval(node.value))
    return set()


def _imports(tree):
    """Yield (line, module) of every import, also of those inside functions.

    For `from module import name` the module is given, or module.name where that is
    a module of the package that the door does not export under the same name.
    """
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield node.lineno, alias.name
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"line {node.lineno}: relative import"
            folder = PACKAGE.parent / Path(*node.module.split("."))
            exported = _exported(folder / "__init__.py")
            for alias in node.names:
                full = f"{node.module}.{alias.name}"
                path = folder / alias.name
                is_module = path.is_dir() or path.with_suffix(".py").is_file()
                is_module &= alias.name not in exported
                yield node.lineno, full if is_module else node.module


def _import_problems(name, source):
    """Return what is wrong with the imports of one module of the package."""
    room = name.split("/")[0] if "/" in name else None
    problems = []
    for line, module in _imports(ast.parse(source)):
        place = f"{name}:{line}: {module}"
        parts = module.split(".")
        if parts[0] == "numba" and not _is_compiled(name):
            problems.append(f"{place}: compiled code lives in kernels.py")
        if parts[0] == "random" or parts[:2] == ["numpy", "random"]:
            problems.append(f"{place}: draws are keyed")
        if parts[0] != "circuitgen" or len(parts) == 1 or parts[1] == room:
            continue
        if room is None and name != "cli.py":
            problems.append(f"{place}: only cli.py imports rooms from outside them")
        allowed = EVERY_ROOM if room is None else ROOMS[room]
        if parts[1] not in allowed:
            problems.append(f"{place}: {room} must not import {parts[1]}")
        past_door = len(parts) > 2 and parts[1] != "core"
        if past_door and module not in OPEN_MODULES:
            problems.append(f"{place}: goes past the door of {parts[1]}")
    return problems


def _random_uses(tree):
    """Yield the lines that reach numpy.random by attribute."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Attribute) and node.attr == "random":
            if isinstance(node.value, ast.Name) and node.value.id in ("np", "numpy"):
                yield node.lineno


@pytest.mark.parametrize("path", MODULES, ids=_name)
def test_imports_obey_the_table(path):
    assert _import_problems(_name(path), path.read_text("utf-8")) == []


@pytest.mark.parametrize("path", MODULES, ids=_name)
def test_nothing_draws_from_numpys_generators(path):
    assert list(_random_uses(ast.parse(path.read_text("utf-8")))) == []


@pytest.mark.parametrize("door", sorted(PACKAGE.glob("*/__init__.py")), ids=_name)
def test_a_door_exports_all_that_it_imports(door):
    names = {
        alias.asname or alias.name
        for node in ast.parse(door.read_text("utf-8")).body
        if isinstance(node, ast.ImportFrom) and node.module != "__future__"
        for alias in node.names
    }
    assert names == _exported(door)


KERNEL_MODULES = [path for path in MODULES if _is_compiled(_name(path))]


@pytest.mark.skipif(numba.config.DISABLE_JIT, reason="kernels run uncompiled")
@pytest.mark.parametrize("path", KERNEL_MODULES, ids=_name)
def test_kernels_keep_strict_arithmetic_and_release_the_lock(path):
    """Every compiled function, as the compiler was told, not as the source reads."""
    module = importlib.import_module(f"circuitgen.{_name(path)[:-3].replace('/', '.')}")
    compiled = [
        value
        for value in vars(module).values()
        if isinstance(value, Dispatcher) and value.__module__ == module.__name__
    ]
    decorated = path.read_text("utf-8").count("\n@kernel\n")
    assert len(compiled) == decorated
    for function in compiled:
        assert function.targetoptions["fastmath"] is False
        assert function.targetoptions["nogil"] is True
        assert not function.targetoptions.get("parallel", False)


def test_every_folder_is_a_room_of_the_table():
    folders = {path.parent.name for path in PACKAGE.glob("*/__init__.py")}
    assert folders <= EVERY_ROOM


@pytest.mark.parametrize(
    ("name", "source", "words"),
    [
        ("wiring/law.py", "from circuitgen.run import build", "must not import run"),
        ("wiring/law.py", "import circuitgen.column", "must not import column"),
        ("wiring/law.py", "from circuitgen import column", "must not import column"),
        ("column/a.py", "from circuitgen.spec.models import Spec", "past the door"),
        ("run/a.py", "from circuitgen.wiring import law", "past the door"),
        ("cli.py", "from circuitgen.run.build import build", "past the door"),
        ("spec/a.py", "import numba", "compiled code"),
        ("spec/a.py", "from numba import njit", "compiled code"),
        ("spec/a.py", "from numpy.random import default_rng", "keyed"),
        ("spec/a.py", "import random", "keyed"),
        ("spec/a.py", "def f():\n    import circuitgen.run", "spec/a.py:2"),
        ("other.py", "from circuitgen.run import build", "only cli.py"),
        ("run/a.py", "from circuitgen.commands import x", "must not import commands"),
    ],
)
def test_the_check_finds_forbidden_imports(name, source, words):
    [problem] = _import_problems(name, source)
    assert words in problem


@pytest.mark.parametrize(
    ("name", "source"),
    [
        ("wiring/a.py", "from circuitgen.wiring.law import Law"),
        ("wiring/a.py", "from circuitgen.core.errors import InputError"),
        ("column/a.py", "from circuitgen.morphology.arbor import Arbor"),
        ("run/a.py", "from circuitgen.wiring import Law"),
        ("cli.py", "from circuitgen.run import build"),
        ("appositions/kernels.py", "import numba"),
        ("core/draws.py", "from circuitgen import __version__"),
    ],
)
def test_the_check_lets_good_imports_pass(name, source):
    assert _import_problems(name, source) == []
