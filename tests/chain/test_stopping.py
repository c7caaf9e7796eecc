"""When it cannot be done: the chain stops, says so, and no number comes from beyond."""

from __future__ import annotations

import json

import numpy as np
import pytest

import nipc
from nipc.errors import InputError

STUDY = """\
title = "too long an arc for a chaotic motion"
[propagator]
adapter = "ode"
rhs = "motion:rates"
batch = true
method = "rk4"
step = 0.05
[clock]
end = 50.0
outputs = 51
[[state]]
name = "x"
std = 0.01
[[state]]
name = "y"
mean = -0.15
std = 0.01
[[state]]
name = "vx"
mean = 0.5
[[state]]
name = "vy"
[[noise]]
name = "force"
intensity = 2e-3
terms = 6
[[quantity]]
name = "x"
box = [-0.6, 0.6]
[chain]
arcs = ARCS
largest_degree = 3
[ensemble]
members = 3000
"""
MOTION = """\
import numpy as np

def rates(t, s, xi, parameters):
    x, y = s[:, 0], s[:, 1]
    forces = [-x - 2 * x * y + xi[:, 0], -y - x**2 + y**2]
    return np.stack([s[:, 2], s[:, 3], *forces], axis=1)
"""


def test_a_chain_that_stops_is_honest_and_has_a_page(tmp_path):
    reached = {}
    for arcs in (2, 6):
        folder = tmp_path / str(arcs)
        folder.mkdir()
        (folder / "motion.py").write_text(MOTION)
        (folder / "study.toml").write_text(STUDY.replace("ARCS", str(arcs)))
        result = nipc.run(nipc.load_study(folder / "study.toml"), backend="inline")
        data = result.dataset
        known = np.isfinite(data["std"].values[0])
        reached[arcs] = float(data["time"].values[known][-1])
        if reached[arcs] < 50.0:
            assert "The chain stops at" in " ".join(json.loads(data.attrs["notes"]))
            assert np.isnan(data["inside_probability"].values[0][~known]).all()
            assert float(data["trust_horizon"].values[0]) <= reached[arcs]
        assert nipc.write_report(result).stat().st_size > 20_000
        if reached[arcs] < 50.0:
            _questions_are_honest_too(nipc.load_study(folder / "study.toml"), known)
    assert reached[2] < 50.0
    assert reached[2] <= reached[6]


def _questions_are_honest_too(study, known):
    found = nipc.whatif(study, {"force": 0.5}, shares=False)
    assert np.isfinite(found["std"].values[0][known]).all()
    assert np.isnan(found["std"].values[0][~known]).all()
    swept = nipc.sweep(study, [0.5, 1.0], members=500)
    assert np.isnan(swept["beyond_linear"].values[:, 0, ~known]).all()
    with pytest.raises(InputError, match="the arcs stopped before the end of the horizon"):
        nipc.allowance(study)
