"""Runs that end early for a physical reason count as having left, on a chain of arcs.

A particle at rest is pushed by white noise and lost beyond a limit. It moves by a linear map with
Gaussian kicks, exactly, so a plain direct ensemble of 100,000 tells who is lost and when: shares to
0.003 (95 %), which is little beside what is allowed here.
"""

from __future__ import annotations

import json
import re

import numpy as np
import pytest

import nipc
import nipc.workflow as workflow
from nipc.problem.study import Study
from nipc.runs.propagator import Batch, Propagator, Trajectories

END, OUTPUTS, PUSH, STD = 4.0, 33, 0.12, 0.2


class Lost(Propagator):
    """x' = v, v' = xi by the classical Runge-Kutta method; lost where |x| passes the limit.

    It is looked at every eighth of a unit, which are the output times, whatever times are asked.
    """

    vectorised = True

    def __init__(self, limit, lower=None):
        self.limit, self.lower = limit, -limit if lower is None else lower

    def fingerprint(self):
        return f"lost {self.lower} {self.limit}"

    def propagate(self, batch: Batch) -> Trajectories:
        x, v = batch.states.T.copy()
        out = np.empty((len(batch), batch.times.size, 2))
        out[:, 0] = batch.states
        ended = np.full(len(batch), np.nan)
        for i, (a, b) in enumerate(zip(batch.times[:-1], batch.times[1:], strict=True)):
            push = batch.forcing.table(np.array([a, 0.5 * (a + b), b]))[:, :, 0]
            h = b - a
            x = x + h * v + h**2 / 6 * (push[:, 0] + 2 * push[:, 1])
            v = v + h / 6 * (push[:, 0] + 4 * push[:, 1] + push[:, 2])
            now = ((x > self.limit) | (x < self.lower)) & np.isnan(ended)
            ended[now] = b
            out[:, i + 1] = np.stack([x, v], axis=1)
            out[ended < b, i + 1] = np.nan
        return Trajectories(out, ended)


def study(box=9.0, arcs=4, members=10_000, **more):
    """x and v uncertain by 0.2 and 0.1; the box is far away, so that only an ending leaves it."""
    return Study(
        title="invented", seed=9, tolerance=0.02, propagator={"adapter": "ode"},
        clock={"end": END, "outputs": OUTPUTS},
        state=[{"name": "x", "std": STD}, {"name": "v", "std": STD / 2}],
        noise=[{"name": "push", "intensity": PUSH, "terms": 5}],
        quantity=[{"name": "x", "box": [-box, box]}], chain={"arcs": arcs},
        ensemble={"members": members}, **({"check": {"runs": 40}} | more),
    )  # fmt: skip


def solved(settings, propagator, folder, monkeypatch):
    monkeypatch.setattr(workflow, "build_propagator", lambda _: propagator)
    return workflow.run(settings, folder=folder, backend="inline").dataset


def parts(n, seed):
    """Exact free motion at the outputs, x (n, 33) as that of the start and that of the noise."""
    rng = np.random.default_rng(seed)
    h = END / (OUTPUTS - 1)
    factor = PUSH * np.linalg.cholesky(np.array([[h**3 / 3, h**2 / 2], [h**2 / 2, h]]))
    start = STD * rng.standard_normal((n, 1)) + STD / 2 * rng.standard_normal((n, 1)) * np.linspace(
        0.0, END, OUTPUTS
    )
    x, v, walk = np.zeros(n), np.zeros(n), [np.zeros(n)]
    for _ in range(OUTPUTS - 1):
        kick = factor @ rng.standard_normal((2, n))
        x, v = x + h * v + kick[0], v + kick[1]
        walk.append(x)
    return start, np.stack(walk, axis=1)


def walked(n, seed):
    return sum(parts(n, seed))


def survived(outside):
    """Shares never yet outside (33,), an ending at the very start being seen a step later."""
    gone = np.maximum.accumulate(outside, axis=1)
    return 1.0 - gone.mean(axis=0)


def told(data, name):
    """(value, low, high) over time of the only quantity."""
    return (data[f"{name}{end}"].values.reshape(-1, OUTPUTS)[0] for end in ("", "_low", "_high"))


def lost(limit, lower, seed=1):
    x = walked(100_000, seed)
    outside = (x > limit) | (x < lower)
    outside[:, 0] = False  # a run is looked at from its first step on
    return survived(outside)


@pytest.mark.parametrize(
    ("lower", "limit", "arcs"), [(-0.6, 0.6, 4), (-9.0, 0.35, 4), (-9.0, 0.6, 2), (-0.2, 0.2, 8)]
)
def test_who_stays_is_as_in_a_direct_ensemble(tmp_path, monkeypatch, lower, limit, arcs):
    """Lost on either side or on one, seldom or mostly, some at the very start.

    A hundred or two of runs, 10 to 90 of which end, tell who is lost to some hundredths, and the
    interval holds it at every time.
    """
    data = solved(study(arcs=arcs), Lost(limit, lower), tmp_path, monkeypatch)
    exact = lost(limit, lower)
    found, low, high = told(data, "survival_probability")
    np.testing.assert_allclose(found, exact, atol=0.03)
    assert np.all((low <= exact + 0.003) & (exact - 0.003 <= high))
    assert high[-1] - low[-1] > 0.1  # few runs cannot say more
    np.testing.assert_allclose(data["ended_probability"].values, 1 - exact, atol=0.03)
    assert int(data.attrs["failed_runs"]) == 0
    assert data["arc_failed"].values.sum() == 0
    notes = data.attrs["notes"]
    assert "they count as having left" in notes
    assert "overstated" not in notes
    # the free motion is linear, and those that ended do not hide it; but where nearly all have
    # ended, going on far beyond what runs have reached, the arcs' bounds hold them
    assert np.nanmax(data["nonlinear_share"].values) < (1e-3 if limit > 0.3 else 0.15)
    assert np.isfinite(data["nonlinear_share"].values[0, 1:]).all()


def test_the_check_tells_who_truly_ends(tmp_path, monkeypatch):
    """Of 40 held-out members some 40 % end, by a binomial 5 ... 27 (99.9 %); the arcs say which."""
    data = solved(study(), Lost(0.6), tmp_path, monkeypatch)
    (note,) = [n for n in json.loads(data.attrs["notes"]) if "of the check's" in n]
    truly, members, by_arcs, unlike = map(int, re.findall(r"\d+", note))
    assert members == 40
    assert 5 <= truly <= 27
    assert abs(truly - by_arcs) <= unlike <= 4
    ended = np.isnan(data["direct_quantity"].values[:, 0, -1])
    # one lost at the last output is still seen there; that is two in a hundred
    assert truly - 4 <= int(ended.sum()) <= truly


def test_who_decides_the_ending(tmp_path, monkeypatch):
    """Total shares of "is lost by the end" by pick and freeze on the exact motion itself."""
    data = solved(study(), Lost(0.6), tmp_path, monkeypatch)
    n = 40_000
    # the motion is the start's x + v t plus the noise's own walk: swap either
    both = [parts(n, seed) for seed in (5, 6)]
    gone = [
        [np.any(np.abs(both[i][0] + both[j][1])[:, 1:] > 0.6, axis=1).astype(float) for j in (0, 1)]
        for i in (0, 1)
    ]
    variance = np.var(gone[0][0])
    exact = {
        "start": 0.5 * np.mean((gone[0][0] - gone[1][0]) ** 2) / variance,
        "push": 0.5 * np.mean((gone[0][0] - gone[0][1]) ** 2) / variance,
    }
    found = data["exit_driver_total"].sel(quantity="x")
    for name, share in exact.items():
        assert float(found.sel(source=name)) == pytest.approx(share, abs=0.08)


@pytest.mark.parametrize("budget", [26, 18])
def test_where_the_chain_stops_only_those_followed_tell(tmp_path, monkeypatch, budget):
    """Of later times twenty members run directly tell, or nobody; not those whom none followed."""
    settings = study(arcs=8, budget=budget, check={"runs": 20})
    data = solved(settings, Lost(0.6), tmp_path, monkeypatch)
    assert "The chain stops at" in data.attrs["notes"]
    share, low, high = (data[f"ended_probability{end}"].values for end in ("", "_low", "_high"))
    if budget == 18:
        assert np.isfinite(share[0])
        assert np.isnan([share[-1], low[-1], high[-1]]).all()
        return
    assert share[-1] * 20 == pytest.approx(round(share[-1] * 20))
    assert low[-1] <= 1.0 - lost(0.6, -0.6)[-1] <= high[-1]


MAP = """\
import numpy as np

def step(k, x, w, parameters):
    return np.stack([x[:, 0] + x[:, 1], x[:, 1] + w[:, 0]], axis=1)

def lost(x, parameters):
    return np.abs(x[:, 0]) > 2.0
"""
STUDY = """\
title = "lost particle (invented)"
seed = 3
[propagator]
adapter = "map"
map = "motion:step"
lost = "motion:lost"
batch = true
[clock]
end = 12.0
outputs = 13
[[state]]
name = "x"
std = 0.4
[[state]]
name = "v"
std = 0.1
[[noise]]
name = "push"
intensity = 0.05
terms = 3
[[quantity]]
name = "x"
box = [-2.5, 2.5]
[chain]
arcs = 3
[ensemble]
members = 2000
"""


def test_the_same_numbers_whatever_the_workers(tmp_path):
    found = []
    for jobs in (1, 2):
        folder = tmp_path / str(jobs)
        folder.mkdir()
        (folder / "motion.py").write_text(MAP)
        (folder / "study.toml").write_text(STUDY)
        backend = "inline" if jobs == 1 else "processes"
        study = nipc.load_study(folder / "study.toml")
        found.append(nipc.run(study, n_jobs=jobs, backend=backend).dataset)
    one, two = found
    assert 0.02 < float(one["ended_probability"][-1]) < 0.98
    assert set(one.variables) == set(two.variables)
    for name in ("ended_probability", "survival_probability", "exit_driver_total", "mean"):
        np.testing.assert_array_equal(one[name].values, two[name].values)
