"""Runs that end early for a physical reason count as having left, on one arc."""

from __future__ import annotations

import json

import numpy as np
import pytest
from answer_problems import Stepper, linear, solved

from nipc.answers.exits import ExitDrivers
from nipc.problem.study import Study

END, OUTPUTS, PUSH, STD = 4.0, 33, 0.12, 0.2


def study(quantity, runs=400, **more):
    """A particle at rest, pushed by noise; x and v uncertain by 0.2 and 0.1."""
    return Study(
        title="invented", seed=9, tolerance=0.02, propagator={"adapter": "ode"},
        clock={"end": END, "outputs": OUTPUTS},
        state=[{"name": "x", "std": STD}, {"name": "v", "std": STD / 2}],
        noise=[{"name": "push", "intensity": PUSH, "terms": 5}],
        quantity=quantity, design={"kind": "sobol", "runs": runs}, expansion={"degree": 1},
        ensemble={"members": 10_000}, **more,
    )  # fmt: skip


def free(stop):
    return Stepper(linear(np.array([[0.0, 1], [0, 0]]), np.array([[0.0], [1]])), 0.125, stop)


def walked(n, seed):
    """Exact free motion at the outputs: x, v (n, 33)."""
    rng = np.random.default_rng(seed)
    h = END / (OUTPUTS - 1)
    factor = PUSH * np.linalg.cholesky(np.array([[h**3 / 3, h**2 / 2], [h**2 / 2, h]]))
    x, v = STD * rng.standard_normal(n), STD / 2 * rng.standard_normal(n)
    xs, vs = [x], [v]
    for _ in range(OUTPUTS - 1):
        kick = factor @ rng.standard_normal((2, n))
        x, v = x + h * v + kick[0], v + kick[1]
        xs.append(x)
        vs.append(v)
    return np.stack(xs, axis=1), np.stack(vs, axis=1)


def survived(*outside):
    """Shares never yet outside, (33,)."""
    gone = np.maximum.accumulate(np.any(np.stack(outside), axis=0), axis=1)
    return 1.0 - gone.mean(axis=0)


def test_lost_on_either_side_is_left():
    """Lost where |x| > 0.6 was seen: survival of the box |x| <= 0.6 is that of the free motion.

    400 direct runs tell a share to 0.05 (95 %); the expansions' extremes tell who is lost, so the
    ensemble is nearer.
    """
    data = solved(
        study([{"name": "x", "box": [-0.6, 0.6]}, {"name": "v", "box": [-5, 5]}]),
        free(lambda x: np.abs(x[:, 0]) > 0.6),
    )
    x, _ = walked(100_000, 1)
    exact = survived(np.abs(x) > 0.6)
    assert exact[-1] < 0.75
    found = data["survival_probability"].sel(quantity="x").values
    np.testing.assert_allclose(found, exact, atol=0.03)
    low = data["survival_probability_low"].sel(quantity="x").values
    high = data["survival_probability_high"].sel(quantity="x").values
    assert np.all((low <= exact + 1e-9) & (exact <= high + 1e-9))
    # v never leaves its box, but who is lost has left it all the same
    np.testing.assert_allclose(
        data["survival_probability"].sel(quantity="v").values, exact, atol=0.05
    )
    np.testing.assert_allclose(data["ended_probability"].values, 1 - exact, atol=0.05)
    notes = " ".join(json.loads(data.attrs["notes"]))
    assert "of 400 runs of the design ended early for a physical reason" in notes
    assert "motion that goes on" in notes
    said = [f for f in json.loads(data.attrs["findings"]) if f.startswith("The motion ends early")]
    assert len(said) == 1
    assert "trust horizon" in said[0]
    # whether one is lost is decided by noise and start, not by chance: shares are near to whole
    total = data["exit_driver_total"].sel(quantity="x")
    assert float(total.sum()) > 0.9
    assert float(total.min()) > 0.1


def test_an_ending_that_no_quantity_shows():
    """Ends where x > 0.35, x not asked for; the box is of v: both ways of leaving count."""
    data = solved(study([{"name": "v", "box": [-0.4, 0.4]}]), free(lambda x: x[:, 0] > 0.35))
    x, v = walked(100_000, 2)
    exact = survived(x > 0.35, np.abs(v) > 0.4)
    found = data["survival_probability"].sel(quantity="v")
    np.testing.assert_allclose(found.values, exact, atol=0.04)
    alone = survived(np.abs(v) > 0.4)
    assert alone[-1] - exact[-1] > 0.15  # it would be far off without


def test_few_endings_are_spread_by_chance():
    """Too few to learn from: the share is that of the runs, with their wide interval."""
    limit = 1.55
    data = solved(study([{"name": "x", "box": [-9, 9]}]), free(lambda x: x[:, 0] > limit))
    ended = data["ended_probability"].values[-1]
    told = [n for n in json.loads(data.attrs["notes"]) if "by chance" in n]
    assert len(told) == 1
    count = int(told[0].split()[0])
    assert 1 <= count < 5
    assert ended == pytest.approx(count / 400, abs=0.003)
    x, _ = walked(100_000, 3)
    exact = 1 - survived(x > limit)[-1]
    assert data["ended_probability_low"][-1] <= exact <= data["ended_probability_high"][-1]


def test_no_ending_no_word():
    data = solved(study([{"name": "x", "box": [-0.6, 0.6]}], runs=100), free(None))
    assert "ended_probability" not in data
    assert "ended" not in data.attrs["notes"]


def test_exit_shares_count_endings():
    """An ending that only the second group decides gives it the whole share."""
    settings = study([{"name": "x", "box": [-9, 9]}])
    exits = ExitDrivers(settings, ["push", "start"])
    rng = np.random.default_rng(4)
    n, times = 8000, settings.clock.times

    def seen(first, second):
        values = np.zeros((n, times.size, 1)) + first[:, None, None]
        return values, np.where(second > 1.0, 2.0, np.nan)

    a, b = rng.standard_normal((2, n)), rng.standard_normal((2, n))
    exits.update(seen(*a), seen(*b), iter([seen(b[0], a[1]), seen(a[0], b[1])]))
    total = exits._shares.result().total[:, 0, 0]
    assert total[0] == 0.0
    assert total[1] == pytest.approx(1.0, abs=0.05)


def test_a_chain_counts_endings():
    """Lost where |x| > 0.6 was seen, in eight arcs: survival is that of the free motion.

    Endings seen in some hundred runs tell a rate to a tenth or so, which the interval holds.
    """
    base = study([{"name": "x", "box": [-0.6, 0.6]}]).model_dump(exclude_none=True)
    base["noise"][0]["terms"] = 2
    chained = Study.model_validate(
        base | {"chain": {"arcs": 8}, "check": {"runs": 40}, "runs": {"tolerated_failures": 0.5}}
    )
    data = solved(chained, free(lambda x: np.abs(x[:, 0]) > 0.6))
    x, _ = walked(100_000, 1)
    exact = survived(np.abs(x) > 0.6)
    found = data["survival_probability"].sel(quantity="x").values
    np.testing.assert_allclose(found, exact, atol=0.04)
    low, high = (
        data[f"survival_probability_{e}"].sel(quantity="x").values for e in ("low", "high")
    )
    assert np.mean((low - 0.005 <= exact) & (exact <= high + 0.005)) > 0.9
    np.testing.assert_allclose(data["ended_probability"].values, 1 - exact, atol=0.06)
    assert "they count as having left" in data.attrs["notes"]
    assert int(data.attrs["failed_runs"]) == 0
    # the start and the push decide who leaves, as the free motion's own pick-and-freeze would say
    assert np.nansum(data["exit_driver_total"].values) > 0.9


def test_once_most_have_ended_only_that_is_told():
    """60 runs, nine in ten of which end: no expansion late, but a share of endings to the end."""
    data = solved(
        study([{"name": "x", "box": [-0.6, 0.6]}], runs=60),
        free(lambda x: np.abs(x[:, 0]) > 0.15),
    )
    x, _ = walked(100_000, 6)
    exact = 1 - survived(np.abs(x) > 0.15)
    assert exact[-1] > 0.85
    low, high = (data[f"ended_probability_{end}"].values for end in ("low", "high"))
    assert np.mean((low <= exact + 0.01) & (exact - 0.01 <= high)) > 0.9
    late = np.isnan(data["survival_probability"].sel(quantity="x").values)
    assert late[-1]
    assert not late[:10].any()
    assert float(data["trust_horizon"][0]) < END
    assert "too few runs of the design go on" in data.attrs["notes"]


def test_a_question_to_a_chain_counts_endings(tmp_path, monkeypatch):
    """At scale one a what-if tells what the study tells; with no push at all fewer end."""
    import nipc

    stopping = free(lambda x: np.abs(x[:, 0]) > 0.6)
    for place in ("nipc.workflow", "nipc.questions"):
        monkeypatch.setattr(f"{place}.build_propagator", lambda study: stopping)
    base = study([{"name": "x", "box": [-0.6, 0.6]}]).model_dump(exclude_none=True)
    base["noise"][0]["terms"] = 2
    chained = Study.model_validate(
        base | {"chain": {"arcs": 4}, "check": {"runs": 20}, "runs": {"tolerated_failures": 0.5}}
    )
    told = nipc.run(chained, folder=tmp_path, backend="inline").dataset
    name = "survival_probability"
    whole = told[name].values[0]
    same = nipc.whatif(chained, {"push": 1.0}, folder=tmp_path)[name].values[0]
    # the ensemble's far members may be run directly in the study: some in ten thousand
    assert same == pytest.approx(whole, abs=2e-3)
    quiet = nipc.whatif(chained, {"push": 0.0}, folder=tmp_path)
    rng = np.random.default_rng(2)
    x, v = STD * rng.standard_normal(100_000), STD / 2 * rng.standard_normal(100_000)
    free_motion = x[:, None] + v[:, None] * told["time"].values
    exact = survived(np.abs(free_motion) > 0.6)
    assert exact[-1] > whole[-1] + 0.1
    low, high = (quiet[f"{name}_{end}"].values[0] for end in ("low", "high"))
    assert np.all((low - 0.02 <= exact) & (exact <= high + 0.02))
