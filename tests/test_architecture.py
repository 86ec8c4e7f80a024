"""The layout of the package: who may import whom, how long a module may be, what the public names are."""

from __future__ import annotations

import ast
import inspect
import subprocess
import sys
from collections.abc import Iterator
from fnmatch import fnmatchcase
from graphlib import CycleError, TopologicalSorter
from importlib import import_module
from pathlib import Path

import pytest

import stackopt

ROOT = Path(inspect.getfile(stackopt)).parent

ROWS = (
    ("errors", "units", "status", "blocks", "archive"),
    ("untrusted", "stopping"),
    ("physics", "physics.*", "checkpoint", "lock", "watching", "workers"),
    ("problem",),
    ("model", "deviation", "front"),
    ("drive_point", "inside", "rayleigh"),
    ("readers", "readers.*"),
    ("lanes", "kernel", "descent"),
    ("rows",),
    ("rows", "compiled"),
    ("evaluate",),
    ("cases", "tolerance", "band", "sensitivity"),
    ("demands",),
    ("cluster", "shares", "stock", "scout", "equals", "prediction", "choice", "explain", "build"),
    ("explore", "moves", "proof", "confirm"),
    ("phases",),
    ("bench", "bench.*"),
    ("outputs", "outputs.*"),
    ("saved", "run_folder"),
    ("run", "run_record", "runs"),
    ("cli", "cli_bench", "cli_endings", "results_cli"),
)
"""A module imports from rows above its own, or from its own row."""

ONLY_IMPORTERS = {
    "pymoo": ("explore",),
    "matplotlib": ("outputs.*",),
    "bokeh": ("outputs.page*",),
    "rich": ("outputs.*",),
    "jinja2": ("outputs.templating",),
    "numba": ("lanes", "kernel", "descent", "equals"),
    "llvmlite": ("lanes",),
    "distributed": ("cluster",),
    "typer": ("cli", "*_cli", "cli_*"),
    "pydantic": ("readers.*",),
    "skrf": ("readers.touchstone",),
    "pint": ("units",),
}
"""Packages that are some modules' own business."""

MOST_LINES = 420


def modules() -> dict[str, ast.Module]:
    """Every module of the package by its name below ``stackopt``; the package itself has the empty name."""
    found = {}
    for path in sorted(ROOT.rglob("*.py")):
        parts = path.relative_to(ROOT).with_suffix("").parts
        name = ".".join(parts[:-1] if parts[-1] == "__init__" else parts)
        found[name] = ast.parse(path.read_text(encoding="utf-8"))
    return found


MODULES = modules()
NAMES = sorted(name for name in MODULES if name)


def imported(tree: ast.Module) -> Iterator[str]:
    """Full names of all modules that a module imports anywhere, inside functions and for type checkers too."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "write imports in full"
            for alias in node.names:
                full = f"{node.module}.{alias.name}"
                yield full if full.removeprefix("stackopt.") in MODULES else str(node.module)


def own_imports(name: str) -> set[str]:
    """Modules of the package that a module imports, by their names below ``stackopt``."""
    found = {full.removeprefix("stackopt").removeprefix(".") for full in imported(MODULES[name]) if is_own(full)}
    return found - {""}


def is_own(full: str) -> bool:
    return full.split(".")[0] == "stackopt"


def row_of(name: str) -> int:
    for number, patterns in enumerate(ROWS):
        if any(fnmatchcase(name, pattern) for pattern in patterns):
            return number
    pytest.fail(f"{name} has no row; give it one in ROWS")


class TestImports:
    @pytest.mark.parametrize("name", NAMES)
    def test_only_from_above(self, name: str) -> None:
        wrong = sorted(other for other in own_imports(name) if row_of(other) > row_of(name))
        assert not wrong, f"{name} imports from rows below its own"

    def test_every_row_is_used(self) -> None:
        patterns = [pattern for row in ROWS for pattern in row]
        assert not [pattern for pattern in patterns if not any(fnmatchcase(name, pattern) for name in NAMES)]

    def test_no_cycles(self) -> None:
        graph = {name: own_imports(name) for name in NAMES}
        try:
            order = list(TopologicalSorter(graph).static_order())
        except CycleError as error:
            pytest.fail(f"modules import one another in a circle: {' -> '.join(error.args[1])}")
        assert set(order) >= set(NAMES)

    def test_the_two_searches_do_not_know_each_other(self) -> None:
        for one, other in (("explore", "proof"), ("proof", "explore")):
            assert other not in reachable(one)

    def test_the_kernel_knows_no_problem(self) -> None:
        """Compiled code takes arrays only."""
        for name in ("kernel", "descent", "lanes"):
            assert reachable(name) <= {"kernel", "lanes", "blocks"}

    def test_the_quick_look_needs_no_compiled_code_at_first(self) -> None:
        for name in ("scout", "evaluate", "prediction"):
            assert not {"kernel", "descent", "equals", "lanes"} & at_import(name)

    @pytest.mark.parametrize("package", ONLY_IMPORTERS)
    def test_only_importers(self, package: str) -> None:
        users = [name for name in MODULES if any(full.split(".")[0] == package for full in imported(MODULES[name]))]
        assert users, f"nothing imports {package}; take it out of ONLY_IMPORTERS"
        allowed = ONLY_IMPORTERS[package]
        assert not [name for name in users if not any(fnmatchcase(name, pattern) for pattern in allowed)]

    def test_nothing_from_the_tests(self) -> None:
        roots = {full.split(".")[0] for tree in MODULES.values() for full in imported(tree)}
        assert not roots & {"tests", "builders", "pytest", "hypothesis", "conftest"}


def reachable(name: str) -> set[str]:
    """Modules that a module imports, directly or through others."""
    found: set[str] = set()
    waiting = [name]
    while waiting:
        for other in own_imports(waiting.pop()) - found:
            found.add(other)
            waiting.append(other)
    return found


def at_import(name: str) -> set[str]:
    """Modules loaded when a module is imported: those imported outside functions, directly or through others."""
    found: set[str] = set()
    waiting = [name]
    while waiting:
        tree = MODULES[waiting.pop()]
        top = ast.Module([node for node in tree.body if isinstance(node, ast.Import | ast.ImportFrom)], [])
        for full in imported(top):
            other = full.removeprefix("stackopt.")
            if is_own(full) and other not in found:
                found.add(other)
                waiting.append(other)
    return found


class TestModules:
    @pytest.mark.parametrize("path", sorted(ROOT.rglob("*.py")), ids=lambda path: path.relative_to(ROOT).as_posix())
    def test_not_too_long(self, path: Path) -> None:
        assert len(path.read_text(encoding="utf-8").splitlines()) <= MOST_LINES

    @pytest.mark.parametrize("name", NAMES)
    def test_docstrings(self, name: str) -> None:
        assert ast.get_docstring(MODULES[name]), f"{name} does not say what it is for"
        assert not list(without_docstring(MODULES[name], name))


def without_docstring(node: ast.AST, where: str) -> Iterator[str]:
    """Public functions, classes and methods that say nothing."""
    for child in ast.iter_child_nodes(node):
        if not isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef) or child.name.startswith("_"):
            continue
        if ast.get_docstring(child) is None:
            yield f"{where}.{child.name}"
        if isinstance(child, ast.ClassDef):
            yield from without_docstring(child, f"{where}.{child.name}")


class TestPublicNames:
    def test_are_all_there(self) -> None:
        for name in stackopt.__all__:
            assert callable(getattr(stackopt, name))
        assert sorted(stackopt.__all__) == sorted(set(stackopt.__all__))

    def test_unknown_name(self) -> None:
        with pytest.raises(AttributeError, match="module 'stackopt' has no attribute 'shield'"):
            stackopt.shield  # noqa: B018

    def test_no_module_hides_one(self) -> None:
        """Importing a module makes it an attribute of its package, in the place of a function of the same name."""
        assert not set(stackopt.__all__) & {name.split(".")[0] for name in NAMES}

    def test_are_still_there_when_everything_is_loaded(self) -> None:
        code = "\n".join(
            [
                "import stackopt",
                "from importlib import import_module",
                f"for name in {NAMES!r}: import_module('stackopt.' + name)",
                "for name in stackopt.__all__: assert callable(getattr(stackopt, name)), name",
            ]
        )
        done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
        assert done.returncode == 0, done.stderr

    @pytest.mark.parametrize("name", NAMES)
    def test_every_module_can_be_imported(self, name: str) -> None:
        assert import_module(f"stackopt.{name}").__doc__
