"""Checks against outside values, recorded as they hold: what, source, tolerance, reached.

A test takes the fixture `published` and calls

    published("Gauss-Hermite nodes, n = 5", nodes, table, source="Abramowitz & Stegun 1964, 25.10",
              rel=1e-10)

which asserts that the first agrees with the second, element by element, and enters a row. A value
recalled has "(from memory)" behind its source; a fact of the trade "common practice, no source".

    python -m pytest tests/published -m "" --published-table

writes the rows into tests/README.md; `test_table.py` holds that they are those of the checks.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

README = Path(__file__).parents[1] / "README.md"
BEGIN, END = "<!-- published checks -->", "<!-- end of published checks -->"


@dataclass(frozen=True)
class Row:
    """One check; `reached` is the largest deviation, in the tolerance's own kind."""

    subject: str
    what: str
    source: str
    tolerance: str
    reached: float

    def __str__(self) -> str:
        cells = (self.subject, self.what, self.source, self.tolerance, f"{self.reached:.1e}")
        return "| " + " | ".join(cells) + " |"


ROWS = pytest.StashKey[dict[tuple[str, str], Row]]()


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption(
        "--published-table", action="store_true", help="write the checks into tests/README.md"
    )


def pytest_configure(config: pytest.Config) -> None:
    config.stash[ROWS] = {}


@pytest.fixture
def rows(request: pytest.FixtureRequest) -> dict[tuple[str, str], Row]:
    """The rows so far, by subject and what."""
    return request.config.stash[ROWS]


@pytest.fixture
def published(request: pytest.FixtureRequest, rows) -> Callable[..., None]:
    """published(what, reached, expected, source=..., rel= or abs=): see this file's docstring."""
    subject = Path(str(request.node.path)).stem.removeprefix("test_").replace("_", " ")

    def check(
        what: str,
        reached: object,
        expected: object,
        *,
        source: str,
        rel: float | None = None,
        abs: float | None = None,
    ) -> None:
        assert (rel is None) != (abs is None), "give rel or abs"
        found, wanted = np.broadcast_arrays(np.asarray(reached, float), np.asarray(expected, float))
        gap = np.abs(found - wanted)
        worst = float(np.max(gap if rel is None else gap / np.abs(wanted)))
        limit = abs if rel is None else rel
        kind = "" if rel is None else " relative"
        row = Row(subject, what, source, f"{limit:.1e}{kind}", worst)
        before = rows.get((subject, what))
        if before is None or worst > before.reached or np.isnan(worst):
            rows[subject, what] = row
        assert worst <= limit, f"{what}: off by {worst:.3e}, {limit:.1e} is allowed ({source})"

    return check


def pytest_sessionfinish(session: pytest.Session, exitstatus: int) -> None:
    if not session.config.getoption("--published-table") or exitstatus != 0:
        return
    text = README.read_text(encoding="utf-8")
    head, tail = text[: text.index(BEGIN)], text[text.index(END) :]
    lines = ["| subject | what | source | tolerance | reached |", "|---|---|---|---|---|"]
    lines += [str(row) for _, row in sorted(session.config.stash[ROWS].items())]
    README.write_text(head + BEGIN + "\n\n" + "\n".join(lines) + "\n\n" + tail, encoding="utf-8")
