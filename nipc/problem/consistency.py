"""What must hold between the tables of a study, beyond each table by itself.

It works on plain dictionaries and passes over what is missing or of the wrong type, so that a file
with other errors still has these found, all at once.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from nipc.errors import Finding
from nipc.problem.quantities import RESERVED, expression_fault
from nipc.problem.start import covariance_fault, read_matrix
from nipc.problem.units import SECONDS

Raw = dict[str, Any]


def findings(raw: Raw, folder: Path) -> list[Finding]:
    """All inconsistencies of a study given as nested dictionaries."""
    found: list[Finding] = []
    for check in (_names, _start, _quantities, _joint_boxes, _noise, _design):
        found += check(raw, folder)
    return found


def _tables(raw: Raw, key: str) -> list[Raw]:
    tables = raw.get(key)
    return [t if isinstance(t, dict) else {} for t in tables] if isinstance(tables, list) else []


def _named(raw: Raw, key: str) -> list[str]:
    return [t["name"] for t in _tables(raw, key) if isinstance(t.get("name"), str)]


def nearest(word: str, known: list[str]) -> str:
    """' (did you mean ...?)' where one of the known words is near."""
    match = difflib.get_close_matches(word, known, 1, 0.6)
    return f" (did you mean {match[0]!r}?)" if match else ""


def _names(raw: Raw, folder: Path) -> Iterator[Finding]:
    seen: dict[str, str] = {}
    for key in ("state", "parameter", "noise"):
        for i, table in enumerate(_tables(raw, key), start=1):
            name = table.get("name")
            if not isinstance(name, str):
                continue
            place = f"{key}[{i}].name"
            if name in seen:
                yield Finding(
                    place,
                    f"{name!r} is already the name of {seen[name]}; names of state "
                    "components, parameters and noise sources must differ",
                )
            elif name in RESERVED:
                yield Finding(place, f"{name!r} has a meaning in expressions; choose another name")
            elif name == "start":
                yield Finding(
                    place,
                    "'start' stands for the uncertain start among the drivers; choose another name",
                )
            seen.setdefault(name, f"{key} {i}")
    quantities: set[str] = set()
    for i, name in enumerate(_named(raw, "quantity"), start=1):
        if name in quantities:
            yield Finding(f"quantity[{i}].name", f"two quantities are called {name!r}")
        quantities.add(name)


def _start(raw: Raw, folder: Path) -> Iterator[Finding]:
    start = raw.get("start")
    start = start if isinstance(start, dict) else {}
    inline, file = start.get("covariance"), start.get("covariance_file")
    states = _tables(raw, "state")
    with_std = [t.get("name") for t in states if t.get("std") is not None]
    if (inline is not None or file is not None) and with_std:
        yield Finding(
            "start",
            f"a covariance is given, and std for {', '.join(map(str, with_std))} "
            "too; give one of the two",
        )
    if inline is not None and file is not None:
        yield Finding("start", "give covariance or covariance_file, not both")
    matrix, key = None, "start.covariance"
    if isinstance(file, str):
        key = "start.covariance_file"
        path = folder / file
        try:
            matrix = read_matrix(path)
        except OSError as error:
            yield Finding(key, f"cannot read {file!r}: {error.strerror or error}")
        except (ValueError, UnicodeDecodeError) as error:
            yield Finding(key, str(error))
    elif isinstance(inline, list):
        try:
            matrix = np.array(inline, dtype=float)
        except (ValueError, TypeError):
            yield Finding(key, "all rows of the covariance must be numbers and of one length")
    if matrix is not None and states:
        fault = covariance_fault(np.atleast_1d(matrix), len(states))
        if fault:
            yield Finding(key, fault)


def _quantities(raw: Raw, folder: Path) -> Iterator[Finding]:
    states, parameters = _named(raw, "state"), _named(raw, "parameter")
    for i, table in enumerate(_tables(raw, "quantity"), start=1):
        name, component = table.get("name"), table.get("component")
        expression = table.get("expression")
        if isinstance(component, str) and component not in states:
            yield Finding(
                f"quantity[{i}].component",
                f"{component!r} is no state component"
                f"{nearest(component, states)}; known: {', '.join(states)}",
            )
        if isinstance(expression, str):
            fault = expression_fault(expression, [*states, *parameters])
            if fault:
                yield Finding(f"quantity[{i}].expression", fault)
        plain = all(table.get(k) is None for k in ("component", "expression", "function"))
        if plain and isinstance(name, str) and name not in states:
            yield Finding(
                f"quantity[{i}]",
                f"{name!r} is no state component, so say what it is with "
                "one of component, expression, function",
            )


def _joint_boxes(raw: Raw, folder: Path) -> Iterator[Finding]:
    boxed = {t.get("name") for t in _tables(raw, "quantity") if t.get("box") is not None}
    for i, table in enumerate(_tables(raw, "joint_box"), start=1):
        for name in table.get("quantities") or []:
            if name not in boxed:
                yield Finding(f"joint_box[{i}].quantities", f"{name!r} is no quantity with a box")


def _noise(raw: Raw, folder: Path) -> Iterator[Finding]:
    propagator = raw.get("propagator")
    propagator = propagator if isinstance(propagator, dict) else {}
    corrected = propagator.get("adapter") == "kicks"
    for i, table in enumerate(_tables(raw, "noise"), start=1):
        clock = raw.get("clock")
        unit = clock.get("unit", "s") if isinstance(clock, dict) else "s"
        if table.get("per") is not None and unit not in SECONDS:
            yield Finding(
                f"noise[{i}].per",
                f"the clock's unit is {unit!r}, which has no known length; leave `per` out and "
                "give the intensity per square root of the clock's unit",
            )
        ito = table.get("calculus") == "ito" and table.get("enters") == "multiplicative"
        if ito and not corrected:
            yield Finding(
                f"noise[{i}].calculus",
                "a smooth forcing path gives the Stratonovich "
                "solution (Wong & Zakai 1965), so multiplicative noise cannot be read in "
                "the Ito sense here: add the drift correction to the propagator and say "
                'calculus = "stratonovich", or use the kicks adapter, which evaluates '
                "the noise at the state before each kick",
            )


def _design(raw: Raw, folder: Path) -> Iterator[Finding]:
    start = raw.get("start")
    start = start if isinstance(start, dict) else {}
    uncertain = (
        _tables(raw, "noise")
        or any(t.get("std") for t in _tables(raw, "state"))
        or start.get("covariance") is not None
        or start.get("covariance_file") is not None
        or any(t.get("law") not in (None, "fixed") for t in _tables(raw, "parameter"))
    )
    if not uncertain:
        yield Finding(
            "",
            "nothing is uncertain: there is no noise source, no std or covariance of "
            "the start and no parameter with a law, so there is nothing to expand",
        )
