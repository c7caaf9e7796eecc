"""Arcs that choose their own length, far members that are run, chains that go on directly."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

import nipc
from nipc.chain.records import ArcRecord, alike, read_records, write_records

STUDY = """\
title = "pendulum, pushed (invented)"
seed = 8
tolerance = 0.05
[propagator]
adapter = "ode"
rhs = "motion:rates"
batch = true
method = "rk4"
step = 0.1
[clock]
end = 25.0
outputs = 26
period = 6.3
[[state]]
name = "q"
mean = 1.0
std = 0.05
[[state]]
name = "v"
[[noise]]
name = "push"
intensity = 0.03
[[quantity]]
name = "q"
box = [-1.6, 1.6]
[chain]
arcs = "auto"
[ensemble]
members = 6000
[check]
runs = 6
"""
MOTION = """\
import numpy as np

def rates(t, s, xi, parameters):
    return np.stack([s[:, 1], -np.sin(s[:, 0]) + xi[:, 0]], axis=1)
"""


def solved(folder: Path, text: str = STUDY, jobs: int = 1):
    folder.mkdir(exist_ok=True)
    (folder / "motion.py").write_text(MOTION)
    (folder / "study.toml").write_text(text)
    study = nipc.load_study(folder / "study.toml")
    return nipc.run(study, n_jobs=jobs, backend="inline" if jobs == 1 else "processes")


def direct_std(members: int = 20_000) -> np.ndarray:
    """Standard deviation of q by plain Gaussian increments held over steps of 0.05."""
    rng = np.random.default_rng(77)
    s = np.stack([1.0 + 0.05 * rng.standard_normal(members), np.zeros(members)], axis=1)
    out, h = [s[:, 0].std()], 0.05
    for k in range(1, 501):
        push = 0.03 * rng.standard_normal(members) / np.sqrt(h)

        def rates(x, push=push):
            return np.stack([x[:, 1], -np.sin(x[:, 0]) + push], axis=1)

        k1 = rates(s)
        k2 = rates(s + h / 2 * k1)
        k3 = rates(s + h / 2 * k2)
        k4 = rates(s + h * k3)
        s = s + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        if k % 20 == 0:
            out.append(s[:, 0].std())
    return np.array(out)


def test_arcs_of_their_own_length_give_the_right_spread(tmp_path):
    result = solved(tmp_path / "a")
    data = result.dataset
    start, end = data["arc_start"].values, data["arc_end"].values
    assert np.array_equal(start[1:], end[:-1])
    assert (start[0], end[-1]) == (0.0, 25.0)
    found = data["std"].values[0, 1:]
    # both from 6,000 and more members: 4.5 standard errors of 1 / sqrt(2 n), and 1 % for the arcs
    allowed = 4.5 * np.sqrt(1 / 12_000 + 1 / 40_000) + 0.01
    assert found == pytest.approx(direct_std()[1:], rel=allowed)
    # and a worker more, or a second session, changes nothing
    twice = solved(tmp_path / "b", jobs=2).dataset
    again = solved(tmp_path / "b").dataset
    assert data.drop_attrs().identical(twice.drop_attrs())
    assert twice.drop_attrs().identical(again.drop_attrs())
    assert twice.attrs["run_equivalents"] == again.attrs["run_equivalents"]
    records = read_records(result.folder)
    assert [r.end for r in records] == list(end)


def test_a_spent_budget_goes_on_by_direct_runs(tmp_path):
    """With 60 run-equivalents the arcs cannot finish; members go on, and fewer are sure of less."""
    text = STUDY.replace('arcs = "auto"', "arcs = 8\nstate_degree = 4")
    data = solved(tmp_path / "short", "budget = 60.0\n" + text).dataset
    notes = " ".join(json.loads(data.attrs["notes"]))
    assert "the budget is 60" in notes
    assert "went on by direct runs" in notes
    assert data.attrs["run_equivalents"] <= 60.0 * 1.02
    std = data["std"].values[0]
    assert np.isfinite(std).all()
    width = (data["std_high"] - data["std_low"]).values[0] / std
    assert width[-1] > 2.0 * width[3]
    reached = data["time"].values[np.isfinite(data["check_error"].values[0])].max()
    assert data["trust_horizon"].values[0] <= reached < 25.0
    # 20 members and more: 4.5 standard errors of 1 / sqrt(40) would be 70 %; the interval must hold
    late = direct_std()[-1]
    assert data["std_low"].values[0, -1] * 0.8 <= late <= data["std_high"].values[0, -1] * 1.2


def test_far_members_are_run_or_told(tmp_path):
    """A start so wide that some members go over the top: none explodes, and direct runs help."""
    wide = STUDY.replace("std = 0.05", "std = 0.5").replace('arcs = "auto"', "arcs = 8\nSHARE")
    lost = {}
    for share in (0.0, 10.0):
        text = wide.replace("SHARE", f"direct_share = {share}\nrounds = 0")
        data = solved(tmp_path / f"share {share}", text).dataset
        notes = " ".join(json.loads(data.attrs["notes"]))
        lost[share] = int(notes.split(" of 6000 members passed")[0].split()[-1]) if (
            "members passed" in notes) else 0  # fmt: skip
        members = data["member_quantity"].values
        assert np.nanmax(np.abs(members)) < 60.0
        assert np.all(data["std"].values[np.isfinite(data["std"].values)] < 60.0)
        assert (data["arc_direct"].values.sum() > 0) == (share > 0.0)
    assert lost[10.0] < lost[0.0]


def test_records_survive_and_are_grouped(tmp_path):
    record = ArcRecord(0.0, 1.0, 1, 15, 21, 1e-4, "", allowed=1e-3)
    other = ArcRecord(1.0, 2.0, 1, 15, 21, 2e-4, "", allowed=1e-3)
    raised = ArcRecord(2.0, 3.0, 2, 40, 56, 1e-3, "halved at degree 3 (4.0% off)", 1, 2, 2e-3)
    write_records(tmp_path, [record, other, raised])
    assert read_records(tmp_path) == [record, other, raised]
    assert [len(group) for group in alike([record, other, raised])] == [2, 1]
    (tmp_path / "arcs.json").write_text("[{")
    assert read_records(tmp_path) == []


def test_a_sparse_grid_serves_a_near_gaussian_ensemble(tmp_path):
    text = STUDY.replace('arcs = "auto"', "arcs = 8") + '[design]\nkind = "sparse-grid"\n'
    gridded = solved(tmp_path / "grid", text).dataset
    picked = solved(tmp_path / "pool", STUDY.replace('arcs = "auto"', "arcs = 8")).dataset
    assert not np.array_equal(gridded["arc_error"].values, picked["arc_error"].values)
    # the same members by other designs: the arcs' tolerance, not sampling, tells them apart
    for data in (gridded, picked):
        assert np.nanmax(data["check_error"].values) < 0.05
    assert gridded["std"].values[0, 1:] == pytest.approx(picked["std"].values[0, 1:], rel=0.03)


def test_a_bent_ensemble_gets_no_grid():
    from nipc.chain.grid_design import grid_of
    from nipc.chain.horizon import Members

    rng = np.random.default_rng(3)
    x = rng.standard_normal((5000, 2))
    none, still = np.empty((5000, 0)), np.zeros(5000, dtype=bool)
    never = np.full(5000, np.nan)
    bent = 3.0 + x @ [[2.0, 1.0], [0.0, 0.1]]
    grid = grid_of(Members(bent, none, none, none, still, never), 3, 1)
    assert grid is not None
    assert grid.candidates.shape == (11, 5)  # 2 d + 1 nodes of level one in five variables
    assert grid.members.values.mean(axis=0) == pytest.approx([3.0, 3.0], abs=0.15)
    x[:, 1] += x[:, 0] ** 2
    assert grid_of(Members(x, none, none, none, still, never), 3, 1) is None
    assert grid_of(Members(x, none, x[:, :1], none, still, never), 3, 1) is None


def test_a_check_member_whose_run_fails_drops_out(tmp_path):
    """It is not started again from nowhere: the others go on and judge the later arcs."""
    folder = tmp_path / "failing"
    folder.mkdir()
    (folder / "motion.py").write_text(
        MOTION
        + """

def wary(t, s, xi, parameters):
    out = rates(t, s, xi, parameters)
    out[(t > 6.0) & (s[:, 0] > 1.2)] = np.nan
    return out
"""
    )
    once = "arcs = 8\nrounds = 0\ndirect_share = 0.0"
    text = STUDY.replace('arcs = "auto"', once).replace("motion:rates", "motion:wary")
    (folder / "study.toml").write_text(
        text.replace("runs = 6", "runs = 40")
        + """
[runs]
tolerated_failures = 0.5
retries = 0
"""
    )
    data = nipc.run(nipc.load_study(folder / "study.toml"), backend="inline").dataset
    failed = np.isnan(data["direct_quantity"].values[:, 0]).any(axis=1)
    assert 0 < failed.sum() < 20
    # each is one failed run: were it started again there would be one an arc
    design = data["arc_failed"].values.sum()
    assert data.attrs["failed_runs"] == failed.sum() + design
    assert np.isfinite(data["check_error"].values).all()
