"""The house keeps its order: who may import whom, how long a file may be, what loads what."""

from __future__ import annotations

import ast
import subprocess
import sys
from functools import cache
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "scheduler"

# Rooms from left to right: a module imports from its own and from those left of it.
ROOMS = (
    ("errors", "settings"),
    ("tables", "sessions"),
    ("model",),
    ("problem", "coupling"),
    ("solve",),
    (
        "clock",
        "constraints",
        "figures",
        "holdings",
        "intake",
        "limits",
        "outcome",
        "paths",
        "riskmodel",
        "rivals",
    ),
    ("summary", "targets", "transition", "uncertainty", "worlds"),
    ("balances", "least_regret", "list_paths", "list_targets"),
    ("doubts",),
    ("history", "past_paths", "scenarios", "plan", "calibrate", "rehearse", "what_if"),
    ("rest", "written"),
    ("shortfall",),
    ("replan", "follow", "review"),
    ("journal",),
    ("report",),
    ("console",),
    ("cli", "__main__"),
)
RANK = {name: rank for rank, room in enumerate(ROOMS) for name in room}

# A result draws itself when it is asked to; nothing is loaded before.
DRAWN_LATER = {
    ("scheduler.plan", "scheduler.report.figures"),
    ("scheduler.plan", "scheduler.report.page"),
    ("scheduler.rehearse", "scheduler.report.rehearsal_page"),
    ("scheduler.replan", "scheduler.report.replan_page"),
    ("scheduler.review", "scheduler.report.review_page"),
    ("scheduler.what_if", "scheduler.report.what_if_figures"),
    ("scheduler.what_if", "scheduler.report.what_if_page"),
}

MOST_LINES = 600


@cache
def _modules() -> dict[str, Path]:
    """Every module of the package by its dotted name; a package is its `__init__`."""
    found = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        parts = path.relative_to(ROOT).with_suffix("").parts
        found[".".join(parts[:-1] if parts[-1] == "__init__" else parts)] = path
    return found


def _imports(tree: ast.AST) -> set[str]:
    """Modules of the package imported anywhere in a tree, inside functions and by name, too."""
    found: set[str] = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "relative imports hide where a thing comes from"
            base = node.module or ""
            for alias in node.names:
                full = f"{base}.{alias.name}"
                found.add(full if full in _modules() else base)
        elif isinstance(node, ast.Call) and _called(node) == "import_module":
            found |= {arg.value for arg in node.args if isinstance(arg, ast.Constant)}
    return {name for name in found if name == "scheduler" or name.startswith("scheduler.")}


def _called(node: ast.Call) -> str:
    return getattr(node.func, "id", getattr(node.func, "attr", ""))


@cache
def _graph() -> dict[str, set[str]]:
    """What each module imports; the package's own face, which loads lazily, is left out."""
    trees = {name: ast.parse(path.read_text()) for name, path in _modules().items()}
    return {name: _imports(tree) for name, tree in trees.items() if name != "scheduler"}


def _room(module: str) -> str:
    return module.split(".")[1]


def test_every_module_has_a_place_in_the_order() -> None:
    """A new room has to be given one in ROOMS."""
    assert {_room(module) for module in _graph()} == set(RANK)


def test_nothing_imports_from_its_right() -> None:
    """Nor the package's face from inside it; imports within functions count."""
    wrong = [
        f"{module} imports {other}"
        for module, others in _graph().items()
        for other in others
        if (module, other) not in DRAWN_LATER
        and (other == "scheduler" or RANK[_room(other)] > RANK[_room(module)])
    ]
    assert wrong == []


def test_no_module_imports_itself_by_a_detour() -> None:
    """The graph of all imports, those to be drawn later left out, has no cycle."""
    graph = {
        module: {other for other in others if (module, other) not in DRAWN_LATER}
        for module, others in _graph().items()
    }
    cleared: set[str] = set()

    def walk(module: str, path: tuple[str, ...]) -> None:
        assert module not in path, " -> ".join((*path, module))
        if module not in cleared:
            for other in graph.get(module, ()):
                walk(other, (*path, module))
            cleared.add(module)

    for module in graph:
        walk(module, ())


def test_the_walk_sees_imports_of_every_kind() -> None:
    """At the top, in a function, under TYPE_CHECKING, of a name, of a module, by its text."""
    source = """
import scheduler.errors
from scheduler.tables import bars
if TYPE_CHECKING:
    from scheduler.plan import Plan
def late():
    from scheduler.solve import interior as i
    importlib.import_module("scheduler.report.page")
    import numpy
"""
    assert _imports(ast.parse(source)) == {
        "scheduler.errors",
        "scheduler.tables.bars",
        "scheduler.plan",
        "scheduler.solve.interior",
        "scheduler.report.page",
    }


def test_the_command_line_is_imported_nowhere_else() -> None:
    inside = {module for module, others in _graph().items() if _any_of(others, "scheduler.cli")}
    assert inside
    assert all(_room(module) in ("cli", "__main__") for module in inside)


def test_click_and_printing_stay_in_the_command_line() -> None:
    """The library neither prints nor knows of a terminal."""
    for name, path in _modules().items():
        if name.startswith("scheduler.cli"):
            continue
        tree = ast.parse(path.read_text())
        calls = [n for n in ast.walk(tree) if isinstance(n, ast.Call) and _called(n) == "print"]
        assert not calls, name
        names = [
            alias.name for n in ast.walk(tree) if isinstance(n, ast.Import) for alias in n.names
        ]
        assert "click" not in names, name


def _any_of(names: set[str], package: str) -> bool:
    return any(name == package or name.startswith(f"{package}.") for name in names)


def test_every_module_says_what_it_is() -> None:
    """A docstring whose first paragraph ends as a sentence does, or leads on to what follows."""
    for name, path in _modules().items():
        text = ast.get_docstring(ast.parse(path.read_text()))
        assert text, name
        assert text.split("\n\n")[0].rstrip().endswith((".", "?", ":", ",")), name


@pytest.mark.parametrize("folder", ["scheduler", "tests", "benchmarks"])
def test_no_file_is_long(folder: str) -> None:
    """At most 600 lines; half of the package's files are below 200."""
    lengths = {p: len(p.read_text().splitlines()) for p in (ROOT / folder).rglob("*.py")}
    assert {path: n for path, n in lengths.items() if n > MOST_LINES} == {}
    if folder == "scheduler":
        assert sorted(lengths.values())[len(lengths) // 2] < 200


def test_public_functions_have_docstrings() -> None:
    """Of every module whose names are offered by the package's face."""
    import scheduler

    for name in scheduler.__all__:
        assert (getattr(scheduler, name).__doc__ or "").strip(), name


# what loads what; of import and help tests/cli/test_import.py speaks


def _loaded(code: str, *names: str) -> set[str]:
    """Which of these a fresh interpreter has loaded after running the code."""
    report = f"import sys\n{code}\nprint('loaded:', *sys.modules)"
    result = subprocess.run(
        [sys.executable, "-c", report], capture_output=True, text=True, check=True, cwd=ROOT
    )
    modules = result.stdout.rsplit("loaded:", maxsplit=1)[-1].split()
    assert "scheduler" in modules
    return set(names) & set(modules)


def _plan() -> str:
    arguments = ["plan", "examples/orders.csv", "--quiet", "--out", "-"]
    for table in ("market", "profiles", "readings"):
        arguments += [f"--{table}", f"examples/{table}.csv"]
    arguments += ["--date", "2026-03-05", "--at", "09:30"]
    return f"from scheduler.cli import main; main({arguments!r}, standalone_mode=False)"


def test_planning_loads_no_general_solver_and_no_plots() -> None:
    """With the interior solver and without a report; pandas shows that the check sees."""
    heavy = ("cvxpy", "plotly", "scipy.optimize", "scipy.stats")
    assert _loaded(_plan(), *heavy, "pandas") == {"pandas"}
