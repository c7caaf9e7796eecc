"""No import runs upwards or in a circle."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
FREE = {"nipc.arrays", "nipc.errors", "nipc.markup"}
BELOW = {
    "problem": set(),
    "expansion": set(),
    "runs": {"problem"},
    "chain": {"problem", "expansion", "runs"},
    "answers": {"chain", "problem", "expansion", "runs"},
    "report": {"answers", "chain", "problem", "expansion", "runs"},
    "adapters": {"runs", "problem"},
    "commands": {
        "answers", "chain", "problem", "expansion", "runs", "report", "adapters",
        "workflow", "questions", "elsewhere", "pilot", "chart_choice", "study_schema", "terminal",
        "starter",
    },
}  # fmt: skip


def modules() -> dict[str, Path]:
    """Every module of the package by its full name; adapters/ is installed as nipc.adapters."""
    found = {}
    for folder, package in ((ROOT / "nipc", "nipc"), (ROOT / "adapters", "nipc.adapters")):
        for path in folder.rglob("*.py"):
            parts = path.relative_to(folder).with_suffix("").parts
            found[".".join((package, *(p for p in parts if p != "__init__")))] = path
    return found


MODULES = modules()


def imports(path: Path, known: dict[str, Path] = MODULES) -> set[str]:
    """Modules of nipc that a file imports, wherever in it: inside functions and for types too."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: a relative import hides which layer it is from"
            for alias in node.names:
                whole = f"{node.module}.{alias.name}"
                found.add(whole if whole in known else str(node.module))
    return {name for name in found if name.split(".")[0] == "nipc"}


def test_all_folders_are_layers():
    folders = {name.split(".")[1] for name, path in MODULES.items() if path.name == "__init__.py"
               and name != "nipc"}  # fmt: skip
    assert folders == set(BELOW)


@pytest.mark.parametrize("part", sorted(BELOW))
def test_no_import_runs_upwards(part):
    owned = [name for name in MODULES if name.split(".")[1:2] == [part]]
    assert owned
    for name in owned:
        for other in imports(MODULES[name]) - FREE:
            layer = [*other.split("."), ""][1]
            assert layer in BELOW[part] | {part}, f"{name} imports {other}"


@pytest.mark.parametrize("name", sorted(FREE))
def test_what_is_free_for_all_stands_on_nothing(name):
    assert imports(MODULES[name]) == set()


def test_only_the_command_line_knows_the_terminal():
    for name, path in MODULES.items():
        if name not in ("nipc.cli", "nipc.__main__") and not name.startswith("nipc.commands"):
            over = {"nipc.cli", "nipc.terminal", "nipc.starter"} & imports(path)
            assert over == set(), f"{name} imports {over}"


def circles(graph: dict[str, set[str]]) -> list[str]:
    """Chains of imports that end where they began."""
    done: set[str] = set()
    found: list[str] = []

    def visit(name: str, trail: tuple[str, ...]) -> None:
        if name in trail:
            found.append(" -> ".join((*trail[trail.index(name) :], name)))
        elif name not in done:
            for other in sorted(graph.get(name, set()) - {name}):
                visit(other, (*trail, name))
            done.add(name)

    for name in sorted(graph):
        visit(name, ())
    return found


def test_no_circle_among_modules():
    assert circles({name: imports(path) for name, path in MODULES.items()}) == []


def test_the_rules_can_fail(tmp_path):
    """An import upwards inside a function is seen, and so is a circle of three."""
    path = tmp_path / "low.py"
    path.write_text("def f():\n    from nipc.report import headline\n    return headline\n")
    assert imports(path) == {"nipc.report.headline"}
    assert circles({"a": {"b"}, "b": {"c"}, "c": {"a"}}) == ["a -> b -> c -> a"]
    assert circles({"a": {"b", "c"}, "b": {"c"}, "c": set()}) == []
