"""How the parts may touch, proved from the syntax trees."""

import ast
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.running import ROOT

MOST_LINES = 450
OURS = ("app", "solver")
SOURCES = sorted(path for package in OURS for path in (ROOT / package).rglob("*.py"))


def module_name(path: Path) -> str:
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


MODULES = {module_name(path): path for path in SOURCES}


def imports(path: Path) -> Iterator[str]:
    """Yield the full names of what a module imports, anywhere in it."""
    package = module_name(path) if path.name == "__init__.py" else module_name(path).rpartition(".")[0]
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                above = package.split(".")[: len(package.split(".")) - node.level + 1]
                base = ".".join([*above, base]).rstrip(".")
            yield from (f"{base}.{alias.name}" for alias in node.names)
            yield base


def own_imports(name: str) -> set[str]:
    """Return the modules of ours that a module imports."""
    found = set()
    for imported in imports(MODULES[name]):
        parts = imported.split(".")
        known = [".".join(parts[:size]) for size in range(len(parts), 0, -1)]
        match = next((one for one in known if one in MODULES), None)
        if match is not None and match != name:
            found.add(match)
    return found


def test_the_trees_are_there() -> None:
    assert {"app.sheets", "app.engine", "solver"} <= set(MODULES)
    assert "app.keys" in own_imports("app.sheets")


@pytest.mark.parametrize("name", [name for name in MODULES if name.split(".")[0] == "solver"])
def test_the_solver_knows_nothing_of_the_service(name: str) -> None:
    allowed = {"numpy", "scipy", "solver"} | set(sys.stdlib_module_names)
    assert {imported.split(".")[0] for imported in imports(MODULES[name])} <= allowed


def test_no_import_cycles() -> None:
    graph = {name: own_imports(name) for name in MODULES}
    # a package's front door imports its rooms; a room that names the package goes through the door
    done: set[str] = set()

    def visit(name: str, path: tuple[str, ...]) -> None:
        assert name not in path, " -> ".join([*path[path.index(name) :], name])
        if name in done:
            return
        for imported in sorted(graph[name]):
            visit(imported, (*path, name))
        done.add(name)

    for name in sorted(graph):
        visit(name, ())
    assert done == set(MODULES)


@pytest.mark.parametrize("name", MODULES)
def test_nothing_is_evaluated_or_pickled(name: str) -> None:
    banned_calls = {"eval", "exec", "compile", "__import__"}
    banned_modules = {"pickle", "marshal", "shelve", "dill", "cloudpickle", "joblib"}
    assert not {imported.split(".")[0] for imported in imports(MODULES[name])} & banned_modules
    for node in ast.walk(ast.parse(MODULES[name].read_text(encoding="utf-8"))):
        if isinstance(node, ast.Call):
            assert not (isinstance(node.func, ast.Name) and node.func.id in banned_calls), node.lineno
            keywords = {keyword.arg: keyword.value for keyword in node.keywords}
            shell = keywords.get("shell")
            assert not (isinstance(shell, ast.Constant) and shell.value is True), node.lineno
            allowed = keywords.get("allow_pickle")
            assert not (isinstance(allowed, ast.Constant) and allowed.value is True), node.lineno


@pytest.mark.parametrize("name", MODULES)
def test_modules_stay_small(name: str) -> None:
    assert len(MODULES[name].read_text(encoding="utf-8").splitlines()) <= MOST_LINES


@pytest.mark.parametrize("name", [name for name in MODULES if name.split(".")[0] == "app"])
def test_user_input_is_not_asserted(name: str) -> None:
    tree = ast.parse(MODULES[name].read_text(encoding="utf-8"))
    assert not [node.lineno for node in ast.walk(tree) if isinstance(node, ast.Assert)]


@pytest.mark.parametrize(
    "name", ["app.engine", "app.api", "app.jobs", "app.streams", "app.security", "app.pages"]
)
def test_the_event_loop_does_no_numerics_and_no_sql(name: str) -> None:
    """Modules that live on the event loop reach numbers and SQL only through threads and processes."""
    banned = {"numpy", "scipy", "sqlite3", "solver"}
    assert not {imported.split(".")[0] for imported in imports(MODULES[name])} & banned


def test_only_links_builds_addresses() -> None:
    makers = {"urlencode", "quote", "quote_plus", "unquote_to_bytes"}
    users = {
        name
        for name in MODULES
        if {imported.rsplit(".", 1)[-1] for imported in imports(MODULES[name])} & makers
    }
    # security quotes the address a visitor came with, without reading it
    assert users <= {"app.links", "app.security"}
