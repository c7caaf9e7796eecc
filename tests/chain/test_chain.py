"""Chains of arcs: the same numbers however they are run, and nothing that explodes."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import nipc
from nipc.chain.arc import noise_weights
from nipc.problem.study import Study

STUDY = """\
title = "softening spring"
seed = 4
tolerance = 0.05
[propagator]
adapter = "ode"
rhs = "motion:rates"
batch = true
method = "rk4"
step = 0.1
[clock]
end = 12.0
outputs = 13
period = 6.3
[[state]]
name = "x"
mean = 0.5
std = 0.05
[[state]]
name = "v"
[[noise]]
name = "force"
intensity = 0.02
[[quantity]]
name = "x"
box = [-0.9, 0.9]
[chain]
arcs = 6
[ensemble]
members = 5000
[check]
runs = 6
"""
MOTION = """\
import numpy as np

def rates(t, x, xi, parameters):
    return np.stack([x[:, 1], -x[:, 0] + 0.3 * x[:, 0] ** 3 + xi[:, 0]], axis=1)
"""


def study(folder: Path) -> Study:
    folder.mkdir(exist_ok=True)
    (folder / "motion.py").write_text(MOTION)
    (folder / "study.toml").write_text(STUDY)
    return nipc.load_study(folder / "study.toml")


def test_workers_and_resumption_change_nothing(tmp_path):
    one = nipc.run(study(tmp_path / "one"), n_jobs=1).dataset
    two = nipc.run(study(tmp_path / "two"), n_jobs=2).dataset
    again = nipc.run(study(tmp_path / "two"), n_jobs=2).dataset
    assert int(again.attrs["reused_runs"]) == int(again.attrs["propagator_runs"])
    assert one.drop_attrs().identical(two.drop_attrs())
    assert two.drop_attrs().identical(again.drop_attrs())
    assert float(one["trust_horizon"].values[0]) == 12.0
    assert set(one["arc_degree"].values) <= set(range(1, 6))


def test_shares_of_a_chain_agree_with_one_arc(tmp_path):
    """Pick and freeze over six arcs against the closed form on one: within 0.02."""
    chained = nipc.run(study(tmp_path / "chain"), backend="inline").dataset
    study(tmp_path / "single")
    text = STUDY.replace("arcs = 6", "arcs = 1").replace(
        "[chain]", "[expansion]\ndegree = 3\n[chain]"
    )
    text = text.replace("[check]", "[design]\noversampling = 1.3\n[check]")
    (tmp_path / "single" / "study.toml").write_text(text)
    single = nipc.run(nipc.load_study(tmp_path / "single" / "study.toml"), backend="inline").dataset
    for name in ("driver_first", "driver_total"):
        gap = chained[name].values[:, 0, 1:] - single[name].values[:, 0, 1:]
        assert np.max(np.abs(gap)) < 0.02 + 0.03  # 5,000 members: 3 standard errors of about 0.01
    ratio = chained["std"].values[0, 1:] / single["std"].values[0, 1:]
    assert ratio == pytest.approx(1.0, abs=4.5 / np.sqrt(2 * 5000))


def test_members_far_outside_stay_finite(tmp_path):
    """A cubic force repels far members: the polynomial is held back, and that is said."""
    text = STUDY.replace("std = 0.05", "std = 0.25")
    (tmp_path / "motion.py").write_text(MOTION)
    (tmp_path / "study.toml").write_text(text)
    result = nipc.run(nipc.load_study(tmp_path / "study.toml"), backend="inline").dataset
    reached = np.isfinite(result["check_error"].values[0])
    assert np.isfinite(result["std"].values[0][reached]).all()
    assert np.max(np.abs(result["member_quantity"].values[:, 0][:, reached])) < 100.0


def test_weights_of_noise_variables():
    """A state-sized variable weighs 1, one ten times weaker 2: it is squared where degree is 4."""
    assert noise_weights(np.array([1.0, 0.1, 0.01])) == pytest.approx([1.0, 2.0, 3.0])
