"""A single arc whose design grows until the tolerance is kept."""

from __future__ import annotations

import json

import numpy as np
import pytest

import nipc

STUDY = """\
title = "growth"
tolerance = 0.01
[propagator]
adapter = "ode"
rhs = "motion:rates"
batch = true
method = "rk4"
step = 0.1
[clock]
end = 2.0
outputs = 5
[[state]]
name = "x"
mean = 1.0
std = 0.1
[[parameter]]
name = "rate"
law = "uniform"
lower = 0.5
upper = 1.5
[[noise]]
name = "w"
intensity = 0.2
terms = 4
[[quantity]]
name = "x"
box = [0.0, 20.0]
[expansion]
degree = "auto"
fit = "FIT"
[check]
runs = 6
"""
MOTION = """\
def rates(t, x, xi, parameters):
    return parameters[:, :1] * x + xi
"""


@pytest.mark.parametrize("fit", ["least-angle", "least-squares"])
def test_auto_degree_keeps_the_tolerance_and_the_numbers(tmp_path, fit):
    """Var x(2) by quadrature over the rate: start 0.01 e^{2 r t}, noise q (e^{2 r t} - 1)/(2 r)."""
    found = []
    for jobs in (1, 2):
        folder = tmp_path / str(jobs)
        folder.mkdir()
        (folder / "motion.py").write_text(MOTION)
        (folder / "study.toml").write_text(STUDY.replace("FIT", fit))
        study = nipc.load_study(folder / "study.toml")
        found.append(nipc.run(study, n_jobs=jobs).dataset)
    one, two = found
    assert one.drop_attrs().identical(two.drop_attrs())
    assert "within the tolerance" in " ".join(json.loads(one.attrs["notes"]))
    assert int(one.attrs["propagator_runs"]) < nipc.plan(study).total_runs
    nodes, weights = np.polynomial.legendre.leggauss(40)
    r, w, t = 1.0 + 0.5 * nodes, 0.5 * weights, 2.0
    mean = w @ np.exp(r * t)
    inner = 0.01 * np.exp(2 * r * t) + 0.04 * (np.exp(2 * r * t) - 1) / (2 * r)
    variance = w @ (inner + np.exp(2 * r * t)) - mean**2
    assert one["mean"].values[0, -1] == pytest.approx(mean, rel=2e-3)
    assert one["std"].values[0, -1] ** 2 == pytest.approx(variance, rel=1e-2)
    # x(0) acts through exp(r t), so its own share is 0.01 (E e^{rt})^2 of the variance
    first = one["driver_first"].sel(source="start").values[0, -1]
    assert first == pytest.approx(0.01 * mean**2 / variance, rel=5e-2)


def test_a_budget_too_small_to_begin_is_refused(tmp_path):
    (tmp_path / "motion.py").write_text(MOTION)
    text = "budget = 15\n" + STUDY.replace("FIT", "least-angle")
    (tmp_path / "study.toml").write_text(text)
    with pytest.raises(nipc.NipcError, match="at least 14 are needed"):
        nipc.plan(nipc.load_study(tmp_path / "study.toml"))
