"""Coefficients by degree, noise bases, and where runs failed."""

from __future__ import annotations

import json

import numpy as np
import pytest

from nipc import run
from nipc.answers.evidence import add_failures, degree_norms
from nipc.answers.table import ResultTable
from nipc.problem.study import Study
from nipc.report.notes import kinds
from nipc.runs.failures import causes
from nipc.runs.whereabouts import FailedBatch

MOTION = '''
def propagate(x0, times, forcing, parameters):
    """x' = xi, which gives up where its first half adds up to much."""
    import numpy as np
    from numpy.polynomial.legendre import leggauss

    nodes, weights = leggauss(40)
    out = [x0[0]]
    for a, b in zip(times[:-1], times[1:]):
        t = 0.5 * (a + b) + 0.5 * (b - a) * nodes
        out.append(out[-1] + 0.5 * (b - a) * sum(w * forcing(s)[0] for w, s in zip(weights, t)))
    if out[len(out) // 2] > 1.0:
        raise RuntimeError(f"gave up at {out[-1]:.6f}")
    return np.array(out)[:, None]
'''
STUDY = {
    "title": "A path that gives up (invented)",
    "propagator": {"adapter": "function", "function": "giving_up:propagate"},
    "clock": {"end": 1.0, "outputs": 5},
    "state": [{"name": "x", "std": 0.1}],
    "noise": [{"name": "f", "intensity": 1.0, "terms": 3}],
    "quantity": [{"name": "x"}],
    "expansion": {"degree": 1},
    "design": {"kind": "sobol", "runs": 64},
    "ensemble": {"members": 2000},
    "runs": {"tolerated_failures": 0.5, "retries": 0},
    "check": {"runs": 8},
}


def test_norms_by_degree_are_shares_of_the_variance() -> None:
    """Two outputs: 3, 4, 0 of degrees 1, 1, 2 and 6, 0, 8: shares 1 and 0, 0.36 and 0.64."""
    coefficients = np.array([[5.0, 5.0, 7.0], [3.0, 6.0, 0.0], [4.0, 0.0, 0.0], [0.0, 8.0, 0.0]])
    found = degree_norms(coefficients, np.array([0, 1, 1, 2]))
    # the third output has no variance, and no say
    assert found == pytest.approx([np.sqrt((1 + 0.36) / 2), np.sqrt((0 + 0.64) / 2)])
    assert np.isnan(degree_norms(coefficients[:, :1], np.array([0, 1, 1, 3]))[1])


def test_notes_that_differ_in_numbers_are_one() -> None:
    found = kinds(
        ["", "halved at degree 2 (12.1% off); easy", "halved at degree 4 (3% off)", "95 % lost"]
    )
    assert found == {"halved": [1, 2], "easy": [1], "… lost": [3]}


def test_reasons_that_differ_in_numbers_are_one() -> None:
    told = causes(["at x = 0.1", None, "stop", "at x = 2e-3", "at x = -7"])
    assert told == [("at x = 0.1", 3), ("stop", 1)]


def test_batches_that_are_asked_twice_count_once() -> None:
    rng = np.random.default_rng(3)
    batch = FailedBatch(2.0, ("start[1]", "f[1]"), rng.standard_normal((20, 2)), np.arange(20) > 1)
    few = FailedBatch(0.0, ("start[1]",), rng.standard_normal((4, 1)), np.arange(4) > 1)
    table = ResultTable(Study.model_validate(STUDY), (("f", "noise"), ("start", "start")))
    add_failures(table, [batch, few, batch])
    dims, values, _ = table.variables["failed_position"]
    assert dims == ("failed_run", "direction")
    assert values == pytest.approx(batch.values[:2], rel=1e-6)
    assert table.variables["good_position"][1].shape == (18, 2)
    assert list(table.variables["failed_time"][1]) == [2.0, 2.0]
    assert table.variables["direction"][1] == ["x", "f[1]"]


def test_a_result_tells_where_its_runs_failed(tmp_path) -> None:
    """x(1/2) = x0 + Z1 / 2 - sqrt(3) Z2 / 4 by Legendre terms: above 1 at high f[1], low f[2]."""
    (tmp_path / "giving_up.py").write_text(MOTION)
    study = Study.model_validate(STUDY, context={"folder": tmp_path})
    data = run(study, folder=tmp_path / "work", backend="inline").dataset
    failed = int(data.attrs["failed_runs"])
    # P(x(1/2) > 1) = P(N > 1 / sqrt(0.01 + 1/4 + 3/16)) = 0.068: 4 of 64, 1 in a thousand below 1
    assert failed >= 1
    assert data.sizes["failed_run"] == int(data["arc_failed"].item())
    mean = data["failed_position"].mean("failed_run")
    assert float(mean.sel(direction="f[1]")) > 0.5
    assert float(mean.sel(direction="f[2]")) < -0.3
    reasons = json.loads(data.attrs["failures"])
    assert [r["count"] for r in reasons] == [failed]
    assert reasons[0]["reason"].startswith("RuntimeError: gave up at ")
    bases = json.loads(data.attrs["noise_bases"])
    assert bases == [{"source": "f", "basis": "legendre", "terms": 3, "arcs": 1}]
    # a linear response has all its variance at degree one
    assert data["degree_norm"].values == pytest.approx(np.array([[1.0]]))
    assert int(data["arc_terms"].item()) == 5
    assert int(data["arc_runs"].item()) == 64
