"""Economy: run-equivalents of a chain against those of plain Monte Carlo with the same error."""

from __future__ import annotations

import tempfile
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from economy_problems import Problem, geostationary, henon_heiles, kepler_drag

import nipc.workflow as workflow
from nipc.answers.result import Result

MEMBERS = 400_000


def problems() -> list[Problem]:
    """All of the table, in its order."""
    return [
        geostationary(2),
        geostationary(3),
        henon_heiles("cubic potential, regular", (0.0, 0.1, 0.35, 0.0), 80.0, 0.03),
        henon_heiles("cubic potential, chaotic", (0.0, -0.15, 0.5, 0.0), 50.0, None),
        kepler_drag(),
    ]


def solve(problem: Problem) -> Result:
    """The problem's study with its propagator in this process."""
    usual = workflow.build_propagator
    workflow.build_propagator = lambda study: problem.propagator
    try:
        with tempfile.TemporaryDirectory() as folder:
            return workflow.run(problem.study, folder=Path(folder), backend="inline")
    finally:
        workflow.build_propagator = usual


def compare(problem: Problem, result: Result, members: int = MEMBERS) -> dict[str, float]:
    """Largest errors of a result against the reference, and the ratio to plain Monte Carlo."""
    data = result.dataset
    times = data["time"].values
    rng = np.random.default_rng(987)
    sums, squares, inside, done = 0.0, 0.0, 0.0, 0
    centre = data["mean"].values.T
    while done < members:
        n = min(20_000, members - done)
        values = problem.reference(n, times, rng)
        away = values - centre
        sums, squares = sums + away.sum(axis=0), squares + (away**2).sum(axis=0)
        if problem.box is not None:
            k, low, high = problem.box
            inside = inside + ((values[..., k] >= low) & (values[..., k] <= high)).sum(axis=0)
        done += n
    mean = sums / done
    std = np.sqrt(squares / done - mean**2)[1:]
    error = np.abs(data["std"].values.T[1:] / std - 1.0)
    worst = float(error.max())
    cost = float(data.attrs["run_equivalents"])
    row = {
        "cost": cost,
        "std_error": worst,
        "std_error_rms": float(np.sqrt(np.mean(error**2))),
        "ratio": 1.0 / (2.0 * worst**2) / cost,
        "path_error": float(np.nanmax(data["check_error"].values[:, -1])),
    }
    if problem.box is not None:
        gap = data["inside_probability"].values[problem.box[0]] - inside / done
        row["inside_error"] = float(np.max(np.abs(gap)))
    return row


def growth() -> float:
    """Exponent in the horizon, 5 to 40 days, of runs times what each of them covers."""
    spent = []
    for days in (5.0, 40.0):
        problem = geostationary(2, days, int(2 * days))
        settings = problem.study.model_dump() | {"ensemble": {"members": 20_000}}
        study = type(problem.study).model_validate(settings)
        result = solve(replace(problem, study=study))
        spent.append(float(result.dataset.attrs["run_equivalents"]) * days)
    return float(np.log(spent[1] / spent[0]) / np.log(8.0))


def rows() -> list[dict[str, Any]]:
    """One row a figure."""
    table = []
    for problem in problems():
        found = compare(problem, solve(problem))

        def add(what: str, value: float, unit: str, goal: str, met: bool | None) -> None:
            name = f"{problem.name}: {what}"  # noqa: B023
            table.append({"name": name, "value": value, "unit": unit, "goal": goal, "met": met})

        goal = problem.goal_cost
        met = None if goal is None else found["cost"] <= goal
        add("run-equivalents", found["cost"], "", f"<= {goal:g}" if goal else "", met)
        error = found["std_error"]
        add("largest error of a standard deviation", error, "", "<= 0.01", error <= 0.01)
        ratio = found["ratio"]
        add(
            "Monte Carlo runs over ours", ratio, "x", f">= {problem.goal_ratio:g}",
            ratio >= problem.goal_ratio,
        )  # fmt: skip
        path, limit = found["path_error"], problem.path_goal
        met = None if limit is None else path <= limit
        add("path error at the end", path, "", f"<= {limit:g}" if limit else "shown", met)
        if "inside_error" in found:
            gap = found["inside_error"]
            add("largest error of an inside probability", gap, "", "<= 0.01", gap <= 0.01)
    exponent = growth()
    name = "geostationary, 4 states: exponent of cost in the horizon, 5 to 40 days"
    met = exponent <= 1.1
    table.append({"name": name, "value": exponent, "unit": "", "goal": "<= 1.1", "met": met})
    return table
