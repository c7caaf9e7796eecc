"""The examples: each runs from a fresh copy, keeps its trust, and gives a value known otherwise.

Standard deviations of n members scatter by 1 / sqrt(2 n) of themselves, means by std / sqrt(n);
four of these are allowed, 6e-5 of false alarms each, and the study's tolerance beside them.
"""

from __future__ import annotations

import os
import shutil
import subprocess
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import rice

import nipc

ROOT = Path(__file__).parents[1]
EXAMPLES = ROOT / "examples"
LEFT = shutil.ignore_patterns("*.work", "*.so", "__pycache__", "*.o", "ring_track")


def ran(name, folder):
    """Results and study of an example, built and run in a copy, trusted to the end."""
    place = folder / name
    shutil.copytree(EXAMPLES / name, place, ignore=LEFT)
    if (place / "Makefile").exists():
        subprocess.run(["make", "-s"], cwd=place, check=True, timeout=120)
    study = nipc.load_study(place / "study.toml")
    data = nipc.run(study).dataset
    assert data["trust_horizon"].values.tolist() == [study.clock.end] * data.sizes["quantity"]
    assert int(data.attrs["failed_runs"]) == 0
    return data, study


def last(data, variable, quantity):
    return float(data[variable].sel(quantity=quantity).values[-1])


def close_std(data, quantity, expected, tolerance, members):
    found = last(data, "std", quantity)
    assert found == pytest.approx(expected, rel=tolerance + 4.0 / np.sqrt(2.0 * members))


def test_moored_buoy(tmp_path):
    """`ode`: against 20,000 buoys in gusts that are simulated here, step by step."""
    data, study = ran("moored_buoy", tmp_path)
    members = study.ensemble.members
    rng, n, h = np.random.default_rng(5), 20_000, 0.1
    mass = 1.0 + rng.normal(0.30, 0.03, n)
    s, v, gust = rng.normal(0.0, 1.0, n), rng.normal(0.0, 0.1, n), rng.normal(0.0, 0.012, n)
    keep = np.exp(-h / 20.0)
    for _ in range(1200):  # leapfrog; the gust is an exact Gauss-Markov sequence
        s += 0.5 * h * v
        v += h * (gust - 0.01 * s - 1.0e-4 * s**3 - 0.03 * v) / mass
        s += 0.5 * h * v
        gust = keep * gust + 0.012 * np.sqrt(1.0 - keep**2) * rng.standard_normal(n)
    # both sides scatter: one ensemble in four times the members of the other
    close_std(data, "offset", s.std(), study.tolerance, 0.8 * members)
    tension = 0.01 * s + 1.0e-4 * s**3
    close_std(data, "tension", tension.std(), study.tolerance, 0.4 * members)  # heavy tails


def test_phase_noise(tmp_path):
    """`map`: the covariance of small motions, P <- M P M' + s^2 b b' turn by turn."""
    data, study = ran("phase_noise", tmp_path)
    members = study.ensemble.members
    angle = 2.0 * np.pi * 0.025
    turn = np.array([[1.0 - angle**2, angle], [-angle, 1.0]])
    kick = -angle * np.array([angle, 1.0])
    covariance = 0.05**2 * np.eye(2)
    for _ in range(200):
        covariance = turn @ covariance @ turn.T + 0.05**2 * np.outer(kick, kick)
    close_std(data, "phase", np.sqrt(covariance[0, 0]), study.tolerance, members)
    # without noise the phase would have kept a spread of about 0.05
    assert covariance[0, 0] > 2.5 * 0.05**2


def test_dust_grain(tmp_path):
    """`library`: noise and drag keep Boltzmann's distribution exp(-U / T), T = s^2 / (2 drag).

    Kramers' equation (Risken 1989, The Fokker-Planck Equation, chapter 10): equipartition holds in
    any potential. The drag is uniform from 9 to 11 / s; the start has forgotten itself but for
    exp(-5) of its difference.
    """
    data, study = ran("dust_grain", tmp_path)
    members = study.ensemble.members
    close_std(data, "speed", np.sqrt(28.0**2 / 2.0 * np.log(11.0 / 9.0) / 2.0),
              study.tolerance, members)  # fmt: skip
    heat = 28.0**2 / 20.0

    def boltzmann(z, power):
        return z**power * np.exp(-9810.0 * (z + 2.5 * np.expm1(-z / 2.5)) / heat)

    norm, mean, square = (quad(boltzmann, -1.0, 1.0, args=(k,), epsabs=0)[0] for k in range(3))
    spread = np.sqrt(square / norm - (mean / norm) ** 2)
    close_std(data, "height", spread, study.tolerance, members)


def test_eddy_drifter(tmp_path):
    """`persistent`: water that only goes round does not change the distance of Brownian motion.

    Its radial part is Bessel's process whatever the eddy does, so that the distance after a week
    has Rice's distribution (Karatzas & Shreve 1991, section 3.3.C).
    """
    data, study = ran("eddy_drifter", tmp_path)
    members = study.ensemble.members
    spread = np.sqrt(0.5**2 + 7.0)
    law = rice(30.0 / spread, scale=spread)
    close_std(data, "distance", law.std(), study.tolerance, members)
    assert last(data, "mean", "distance") == pytest.approx(
        law.mean(), abs=4.0 * law.std() / np.sqrt(members)
    )
    inside, within = law.cdf(36.0) - law.cdf(24.0), data["inside_probability"]
    found = float(within.sel(quantity="distance").values[-1])
    assert found == pytest.approx(
        inside, abs=0.005 + 4.0 * np.sqrt(inside * (1 - inside) / members)
    )


def test_lunar_orbiter(tmp_path):
    """`kicks`: on a circle a transverse dv changes the semi-major axis by 2 dv / n (Gauss)."""
    data, study = ran("lunar_orbiter", tmp_path)
    members = study.ensemble.members
    n = np.sqrt(4902.8 / 1837.4**3)
    noise = (2.0 / n) ** 2 * 1.0e-6**2 * 21207.0
    start = (2.0 * 0.01) ** 2 + (2.0 / n * 1.0e-6) ** 2
    close_std(data, "semimajor_axis", np.sqrt(noise + start), study.tolerance, members)


def test_every_example_is_run_by_something():
    texts = [(ROOT / ".ci" / "run").read_text()]
    texts += [file.read_text() for file in (ROOT / "tests").rglob("test_*.py")]
    for folder in EXAMPLES.iterdir():
        if (folder / "study.toml").exists():
            assert any(folder.name in text for text in texts), folder.name


@pytest.mark.skipif(os.name != "posix", reason="file modes are of POSIX systems")
def test_the_program_of_the_persistent_example_may_be_executed():
    assert os.access(EXAMPLES / "eddy_drifter" / "drift.py", os.X_OK)
