"""A few runs that foretell the rest."""

from __future__ import annotations

import json

import pytest

MOTION = '''
from pathlib import Path

import numpy as np


def propagate(x0, times, forcing, parameters):
    """x' = v, v' = -x - 8 {bend} x^3 + xi, Runge-Kutta; leaves a mark whenever it is run."""
    (Path(__file__).parent / "ran").touch()
    {fault}

    def rates(t, s):
        return np.array([s[1], -s[0] - {bend} * 8.0 * s[0] ** 3 + forcing(t)[0]])

    state, out = np.array(x0), [np.array(x0)]
    for a, b in zip(times[:-1], times[1:]):
        steps = max(1, int(np.ceil((b - a) / 0.1)))
        h = (b - a) / steps
        for k in range(steps):
            t = a + k * h
            k1 = rates(t, state)
            k2 = rates(t + h / 2, state + h / 2 * k1)
            k3 = rates(t + h / 2, state + h / 2 * k2)
            k4 = rates(t + h, state + h * k3)
            state = state + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        out.append(state)
    return np.array(out)
'''
STUDY = """
title = "A spring that stiffens (invented)"
tolerance = 0.02
[propagator]
adapter = "function"
function = "motion:propagate"
[clock]
end = 12.0
outputs = 9
period = 6.283
[chain]
arcs = {arcs}
[[state]]
name = "x"
mean = 0.4
std = 0.02
[[state]]
name = "v"
[[noise]]
name = "force"
intensity = 0.01
[[quantity]]
name = "x"
"""


def written(folder, bend="0.0", arcs=4, fault="pass"):
    (folder / "motion.py").write_text(MOTION.replace("{bend}", bend).replace("{fault}", fault))
    (folder / "study.toml").write_text(STUDY.replace("{arcs}", str(arcs)))
    return folder / "study.toml"


def test_only_a_pilot_runs_the_propagator(command, tmp_path):
    study = written(tmp_path)
    plain = json.loads(command("plan", study, "--json").out)
    assert "pilot" not in plain
    assert command("check", study).code == 0
    assert not (tmp_path / "ran").exists()
    found = json.loads(command("plan", study, "--json", "--pilot", "--jobs", "2").out)["pilot"]
    assert (tmp_path / "ran").exists()
    assert not (tmp_path / "study.work").exists()
    # a linear motion: nothing but degree one, as the plan has it
    assert found["degrees"] == [1, 1]
    assert found["design_runs"] == plain["design_runs"]
    assert found["check_runs"] == plain["check_runs"]
    assert found["equivalents"] == pytest.approx(plain["total_runs"] / 4)
    assert found["seconds"] == pytest.approx(plain["total_runs"] * found["run_seconds"] / 2)
    assert found["failed"] == 0


def test_a_motion_that_bends_wants_higher_degrees(command, tmp_path):
    study = written(tmp_path, bend="1.0")
    done = command("plan", study, "--pilot")
    assert done.code == 0, done.err
    lines = done.out.splitlines()
    degrees = next(line for line in lines if "degrees of the arcs" in line).split()
    assert int(degrees[4]) >= 2
    runs = next(line for line in lines if "runs in all" in line).split()
    least = next(line for line in lines if line.strip().startswith("together")).split()
    assert runs[-2] == "about"
    assert int(runs[-1]) > 1.5 * int(least[-1])
    assert max(len(line) for line in lines if str(tmp_path) not in line) <= 80


def test_of_a_single_arc_all_is_known(command, tmp_path):
    study = written(tmp_path, bend="1.0", arcs=1)
    found = json.loads(command("plan", study, "--json", "--pilot").out)
    assert found["pilot"]["degrees"] is None
    assert not found["pilot"]["least"]
    assert found["pilot"]["design_runs"] == found["design_runs"]
    assert found["pilot"]["made"] == 4


def test_a_pilot_that_fails_says_why(command, tmp_path):
    study = written(tmp_path, fault='raise RuntimeError("no such field")')
    done = command("plan", study, "--pilot")
    assert done.code == 0, done.err
    assert "All 4 pilot runs failed: RuntimeError: no such field" in " ".join(done.out.split())
    assert json.loads(command("plan", study, "--json", "--pilot").out)["pilot"]["seconds"] is None


def test_a_pilot_that_ends_early_gives_a_lower_bound(command, tmp_path):
    fault = 'assert times[0] < 5.0, "out of fuel"'
    done = command("plan", written(tmp_path, fault=fault), "--pilot")
    assert done.code == 0, done.err
    assert "at least" in done.out.split("Foretold")[1]
    assert "lower bound" in done.out
