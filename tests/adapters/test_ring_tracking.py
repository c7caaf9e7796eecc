"""The Fortran example: compiled, unchanged, wrapped; against the same map in Python."""

from __future__ import annotations

import os
import shutil
import subprocess
from pathlib import Path

import numpy as np
import pytest

import nipc
from nipc.errors import PropagatorError
from nipc.problem.germ import Germ
from nipc.runs.propagator import Batch
from nipc.workflow import build_propagator

EXAMPLE = Path(__file__).parents[2] / "examples" / "ring_tracking"
needs_fortran = pytest.mark.skipif(
    shutil.which("gfortran") is None and "CI" not in os.environ,
    reason="gfortran is not installed on this machine; CI installs it",
)


@pytest.fixture(scope="module")
def ring(tmp_path_factory):
    folder = tmp_path_factory.mktemp("ring")
    for name in ("ring_track.f90", "Makefile", "ring.nml", "study.toml"):
        shutil.copy(EXAMPLE / name, folder)
    subprocess.run(["make", "-s"], cwd=folder, check=True, timeout=120)
    return folder


def tracked(x, p, forcing, turns):
    """The map of the program's header, in Python."""
    out = [(x, p)]
    grid = np.linspace(0, turns, 10 * turns + 1)
    table = forcing.table(grid)[0]
    for k in range(turns):
        for i in range(10):
            t = k + (i + 0.5) / 10
            kick, ripple = (np.interp(t, grid, table[:, j]) for j in (0, 1))
            p += kick / 10
            angle = 2 * np.pi * (0.2052 + ripple) / 10
            x, p = x * np.cos(angle) + p * np.sin(angle), p * np.cos(angle) - x * np.sin(angle)
        p += x**2
        out.append((x, p))
    return np.array(out)


@needs_fortran
def test_a_run_is_the_map_to_rounding(ring):
    study = nipc.load_study(ring / "study.toml")
    germ = Germ.of(study, (4, 2), 0.0, 5.0)
    forcing = germ.noise.realise(np.random.default_rng(2).standard_normal((1, germ.noise.size)))
    times = np.arange(6.0)
    batch = Batch(np.array([[0.12, 0.01]]), times, forcing, np.empty((1, 0)))
    states = build_propagator(study).propagate(batch).states[0]
    assert states == pytest.approx(tracked(0.12, 0.01, forcing, 5), abs=1e-12)


@needs_fortran
def test_a_run_cut_into_arcs_is_the_run_in_one(ring):
    """What a chain rests on: the deck's numbers and the forcing table restart it to rounding."""
    study = nipc.load_study(ring / "study.toml")
    germ = Germ.of(study, (4, 2), 0.0, 20.0)
    forcing = germ.noise.realise(np.random.default_rng(5).standard_normal((1, germ.noise.size)))
    propagator = build_propagator(study)
    times, start = np.arange(0.0, 21.0, 5.0), np.array([[0.12, 0.01]])
    whole = propagator.propagate(Batch(start, times, forcing, np.empty((1, 0)))).states[0]
    cut = [start]
    for k in range(4):
        arc = Batch(cut[-1], times[k : k + 2], forcing, np.empty((1, 0)))
        cut.append(propagator.propagate(arc).states[0, -1:])
    # errors of rounding grow with the 20 turns at most: 200 slices of 1e-16 each, times ten
    assert np.concatenate(cut) == pytest.approx(whole, abs=2e-13)


@needs_fortran
def test_output_times_that_are_no_whole_turns_are_refused(ring):
    study = nipc.load_study(ring / "study.toml")
    germ = Germ.of(study, (4, 2), 0.0, 5.0)
    forcing = germ.noise.realise(np.zeros((1, germ.noise.size)))
    batch = Batch(np.array([[0.1, 0.0]]), np.array([0.0, 2.5, 5.0]), forcing, np.empty((1, 0)))
    with pytest.raises(PropagatorError, match=r"row 2: its time is 2; 2\.5 is expected"):
        build_propagator(study).propagate(batch)


@needs_fortran
def test_a_particle_beyond_the_aperture_has_ended(ring):
    study = nipc.load_study(ring / "study.toml")
    germ = Germ.of(study, (4, 2), 0.0, 5.0)
    forcing = germ.noise.realise(np.zeros((1, germ.noise.size)))
    batch = Batch(np.array([[0.6, 0.3]]), np.arange(6.0), forcing, np.empty((1, 0)))
    found = build_propagator(study).propagate(batch)
    assert 0.0 < found.ended[0] <= 5.0
    assert np.isnan(found.states[0, -1]).all()


@needs_fortran
@pytest.mark.slow
def test_the_study_keeps_its_trust(ring):
    result = nipc.run(nipc.load_study(ring / "study.toml"), n_jobs=2).dataset
    assert float(result["trust_horizon"].values[0]) == 100.0
    assert int(result.attrs["failed_runs"]) == 0
