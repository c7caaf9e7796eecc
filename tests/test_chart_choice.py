"""Charts told apart by a few pairs of opposite members."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import nipc
from nipc.chart_choice import choose_chart, curvature
from nipc.problem.study import Study

RATES = """\
import numpy as np

def rates(t, s, xi, parameters):
    r3 = (s[:, 0] ** 2 + s[:, 1] ** 2) ** 1.5
    return np.stack([s[:, 2], s[:, 3], -s[:, 0] / r3 + xi[:, 0], -s[:, 1] / r3], axis=1)
"""
ORBIT = """\
title = "invented orbit of unit radius"
[propagator]
adapter = "ode"
rhs = "motion:rates"
batch = true
method = "rk8"
step = 0.15
[clock]
end = 50.0
outputs = 17
period = 6.2832
[[state]]
name = "x"
mean = 1.0
std = 1e-3
[[state]]
name = "y"
[[state]]
name = "vx"
[[state]]
name = "vy"
mean = 1.0
[[noise]]
name = "push"
intensity = 1e-4
[[quantity]]
name = "x"
[chain]
arcs = 16
"""


def study(folder: Path, text: str = ORBIT) -> Study:
    (folder / "motion.py").write_text(RATES)
    (folder / "study.toml").write_text(text)
    return nipc.load_study(folder / "study.toml")


def test_an_orbit_wants_its_elements(tmp_path):
    """a^1.5 shears an orbit into an arc of radius one, which is straight in elements alone."""
    chosen = choose_chart(study(tmp_path, ORBIT + '[chart]\nname = "cartesian"\n'))
    assert chosen.own == "cartesian"
    needs_mu = {t.name: t.reason for t in chosen.tried}["equinoctial"]
    assert needs_mu == "it needs mu"
    text = ORBIT + '[chart]\nname = "equinoctial"\nmu = 1.0\n'
    chosen = choose_chart(study(tmp_path, text))
    curved = {t.name: t.curvature for t in chosen.tried}
    assert chosen.best == "equinoctial"
    assert curved["equinoctial"] < 0.1 * curved["cartesian"]
    assert chosen.runs == 13


def test_the_command_tells_it(tmp_path, command, monkeypatch):
    study(tmp_path, ORBIT + '[chart]\nname = "equinoctial"\nmu = 1.0\n')
    monkeypatch.chdir(tmp_path)  # a short path
    found = command("plan", "study.toml", "--charts")
    assert found.code == 0
    assert "Keep equinoctial" in found.out
    assert max(map(len, found.out.splitlines())) <= 80


def test_curvature_in_closed_form():
    """Pairs along two axes of sizes 2 and 0.1, bent by 0.01 along the second: 0.01 / 0.1."""
    odd = np.array([[2.0, 0.0], [0.0, 0.1]])
    even = np.array([[0.0, 0.01], [0.0, 0.0]])
    assert curvature(odd, even) == pytest.approx(0.1)
    assert curvature(odd, np.zeros((2, 2))) == 0.0
    assert curvature(np.zeros((2, 2)), even) == 0.0
