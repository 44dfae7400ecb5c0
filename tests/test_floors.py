"""The three floors: an import never runs upwards, and each library has its one place."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

TOP = Path(__file__).parents[1]
FLOORS = ("acquire", "analyse", "dashboard")

# analyse may use what acquire's messages are made of, and nothing of its sockets and files.
MESSAGES = {"acquire.config", "acquire.readings", "acquire.tables", "acquire.errors"}
LOOP = "analyse/service.py"  # the one module of analyse that touches the world

# What belongs to sockets, files, processes and clocks.
WORLD = {
    "asyncio", "datetime", "http", "io", "multiprocessing", "os", "pathlib", "pyvisa", "select",
    "selectors", "serial", "shutil", "signal", "socket", "sqlite3", "subprocess", "tempfile",
    "threading", "time", "urllib", "zmq",
}  # fmt: skip


def modules(floor: str) -> list[Path]:
    """The floor's own source files."""
    return sorted((TOP / floor).rglob("*.py"))


def imports(path: Path) -> Iterator[str]:
    """The full names that a module imports, wherever in it."""
    package = path.relative_to(TOP).parent.parts
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = package[: len(package) - node.level + 1] if node.level else ()
            yield ".".join([*base, *([node.module] if node.module else [])])


def importers(library: str) -> set[str]:
    """The files of the project that import a library."""
    return {
        path.relative_to(TOP).as_posix()
        for floor in FLOORS
        for path in modules(floor)
        if any(name.split(".")[0] == library for name in imports(path))
    }


@pytest.mark.parametrize("floor", FLOORS)
def test_an_import_never_runs_upwards(floor: str) -> None:
    above = FLOORS[FLOORS.index(floor) + 1 :]
    wrong = [
        (path.relative_to(TOP).as_posix(), name)
        for path in modules(floor)
        for name in imports(path)
        if name.split(".")[0] in above
    ]
    assert wrong == []
    assert modules(floor)


def test_analyse_uses_only_the_messages_of_acquire() -> None:
    wrong = [
        (path.name, name)
        for path in modules("analyse")
        if path.relative_to(TOP).as_posix() != LOOP
        for name in imports(path)
        if name.startswith("acquire") and ".".join(name.split(".")[:2]) not in MESSAGES
    ]
    assert wrong == []


def test_only_the_service_loop_of_analyse_touches_the_world() -> None:
    wrong = [
        (path.name, name)
        for path in modules("analyse")
        if path.relative_to(TOP).as_posix() != LOOP
        for name in imports(path)
        if name.split(".")[0] in WORLD
    ]
    assert wrong == []


def test_no_module_of_analyse_but_the_loop_opens_or_prints() -> None:
    wrong = [
        (path.name, node.func.id)
        for path in modules("analyse")
        if path.relative_to(TOP).as_posix() != LOOP
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        if isinstance(node, ast.Call)
        and isinstance(node.func, ast.Name)
        and node.func.id in ("open", "print", "input")
    ]
    assert wrong == []


def test_pyvisa_has_one_file() -> None:
    assert importers("pyvisa") == {"acquire/instrument.py"}


def test_zmq_is_in_the_bus_alone() -> None:
    found = importers("zmq")
    assert found
    assert all(name.startswith("acquire/bus") for name in found)


def test_bokeh_is_in_the_dashboard_alone() -> None:
    assert all(name.startswith("dashboard/") for name in importers("bokeh"))


def test_the_simulated_laboratory_shares_no_formula_with_analyse() -> None:
    for path in modules("acquire/laboratory"):
        assert not any(name.startswith("analyse") for name in imports(path)), path


def test_nothing_else_stands_at_the_top() -> None:
    known = {
        "acquire", "analyse", "dashboard", "tests", "configs", "pyproject.toml", "README.md",
        "DEVELOPERS.md",
    }  # fmt: skip
    made = {"build", "dist", "runs", "__pycache__"}  # by tools and by use; git ignores them
    found = {path.name for path in TOP.iterdir() if not path.name.startswith(".")}
    found = {name for name in found if not name.endswith(".egg-info")}
    assert found - made <= known
