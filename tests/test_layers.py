"""No import runs upwards or in a circle."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
FREE = {"nipc.arrays", "nipc.errors"}
BELOW = {
    "problem": set(),
    "expansion": set(),
    "runs": {"problem"},
    "chain": {"problem", "expansion", "runs"},
    "answers": {"chain", "problem", "expansion", "runs"},
    "report": {"answers", "chain", "problem", "expansion", "runs"},
    "adapters": {"runs", "problem"},
}


def imports(path: Path) -> set[str]:
    """Modules of nipc that a file imports, wherever in it."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module and node.level == 0:
            found |= {f"{node.module}.{alias.name}" for alias in node.names}
    return {name for name in found if name.split(".")[0] == "nipc"}


def files() -> list[tuple[str, Path]]:
    found = [(p, f) for p in BELOW if p != "adapters" for f in (ROOT / "nipc" / p).rglob("*.py")]
    return found + [("adapters", f) for f in (ROOT / "adapters").rglob("*.py")]


@pytest.mark.parametrize("part", sorted(BELOW))
def test_no_import_runs_upwards(part):
    allowed = BELOW[part] | {part}
    checked = 0
    for owner, path in files():
        if owner != part:
            continue
        for name in imports(path):
            if any(name == free or name.startswith(free + ".") for free in FREE):
                continue
            layer = name.split(".")[1]
            assert layer in allowed, f"{path.relative_to(ROOT)} imports {name}"
        checked += 1
    assert checked > 0


def test_the_rule_can_fail(tmp_path):
    """A file that imports upwards is seen."""
    path = tmp_path / "low.py"
    path.write_text("def f():\n    from nipc.report import write_page\n    return write_page\n")
    assert imports(path) == {"nipc.report.write_page"}


def test_no_circle_among_modules():
    graph: dict[str, set[str]] = {}
    for owner, path in files():
        base = ROOT / "nipc" / owner if owner != "adapters" else ROOT / "adapters"
        parts = path.relative_to(base).with_suffix("").parts
        name = ".".join(("nipc", owner, *[p for p in parts if p != "__init__"]))
        top = ast.parse(path.read_text(encoding="utf-8"))
        graph[name] = {
            node.module
            for node in top.body
            # a package's __init__ only gathers its parts, and is no part of a circle
            if isinstance(node, ast.ImportFrom)
            and node.module
            and node.module.startswith("nipc.")
            and path.name != "__init__.py"
        }
    state: dict[str, int] = {}

    def visit(name: str, trail: tuple[str, ...]) -> None:
        if state.get(name) == 2 or name not in graph:
            return
        assert state.get(name) != 1, " -> ".join((*trail, name))
        state[name] = 1
        for other in graph[name] - {name}:
            visit(other, (*trail, name))
        state[name] = 2

    for name in graph:
        visit(name, ())
