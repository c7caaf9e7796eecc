"""The table in tests/README.md is that of the checks that ran."""

from __future__ import annotations

from pathlib import Path

import pytest

README = Path(__file__).parents[1] / "README.md"
BEGIN, END = "<!-- published checks -->", "<!-- end of published checks -->"


def told() -> set[tuple[str, ...]]:
    """Subject, what, source and tolerance of the table's rows."""
    text = README.read_text(encoding="utf-8")
    part = text[text.index(BEGIN) : text.index(END)]
    lines = [line for line in part.splitlines() if line.startswith("| ")][1:]
    return {tuple(cell.strip() for cell in line.split("|")[1:5]) for line in lines}


def test_the_table_tells_of_the_checks_that_ran(request, rows):
    ran = {(r.subject, r.what, r.source, r.tolerance) for r in rows.values()}
    subjects = {row[0] for row in ran}
    ours = {
        item.path.stem.removeprefix("test_").replace("_", " ")
        for item in request.session.items
        if item.path.parent == Path(__file__).parent
    }
    if not subjects or request.session.testsfailed:
        pytest.skip("no checks ran before this one, or some failed: there is nothing to compare")
    table = {row for row in told() if row[0] in ours}
    remedy = 'python -m pytest tests/published -m "" --published-table'
    assert ran <= table, f"rows are missing; write them anew: {remedy}"


def test_each_has_a_source():
    table = told()
    assert table
    assert all(len(row[2]) > 5 for row in table)
