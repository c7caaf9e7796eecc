"""Scaled sources and moved boxes: against closed forms, fresh studies and the study itself."""

from __future__ import annotations

import numpy as np
import pytest
from asked_studies import BROWNIAN, SPRING, brownian, spring, variance
from scipy.stats import norm

import nipc
from nipc.answers.orders import orders_in
from nipc.answers.scales import scales_of
from nipc.answers.sweep import remarks as sweep_remarks
from nipc.answers.whatif import remarks, what_if
from nipc.errors import InputError, NipcError
from nipc.questions import kept_result, reopened
from nipc.workflow import run

MEMBERS = 8000


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    made = brownian(tmp_path_factory.mktemp("asked"))
    run(made, backend="inline")
    return made


@pytest.fixture(scope="module")
def single(study):
    with reopened(study) as again:
        return again.scaled  # members need no ledger, and other questions may then open it


@pytest.mark.parametrize(
    "scale", [{}, {"push": 0.5}, {"push": 2.0, "start": 0.0}, {"start": 3.0, "pull": 0.0}]
)
def test_a_linear_motion_in_closed_form(single, scale):
    found = what_if(single, scales_of(single.groups, scale)).isel(time=-1)
    parts = {name: scale.get(name, 1.0) for name in ("start", "push", "pull")}
    whole = variance(**parts)
    x = found.sel(quantity="x")
    # the end value of white noise loses nothing to the basis; RK4 is exact up to rounding here
    assert float(x["std"]) == pytest.approx(np.sqrt(whole), rel=1e-8)
    assert float(x["std_low"]) <= np.sqrt(whole) * (1 + 1e-8)
    assert float(x["std_high"]) >= np.sqrt(whole) * (1 - 1e-8)
    for name in ("push", "pull", "start"):
        alone = {other: parts[other] * (other == name) for other in parts}
        share = float(x["driver_total"].sel(source=name))
        assert share == pytest.approx(variance(**alone) / whole, abs=1e-8)
    inside = 2.0 * norm.cdf(1.0 / np.sqrt(whole)) - 1.0
    # four standard errors: a false alarm in 16,000
    error = 4.0 * np.sqrt(inside * (1.0 - inside) / MEMBERS) + 1e-3
    assert float(x["inside_probability"]) == pytest.approx(inside, abs=error)
    assert float(x["inside_probability_low"]) <= float(x["inside_probability"])
    assert float(x["quantile"].sel(level=0.5)) == pytest.approx(
        0.0, abs=4 * 1.2533 * np.sqrt(whole / MEMBERS)
    )
    # y^2 of y ~ N(0, v): standard deviation sqrt 2 v
    square = np.sqrt(2.0) * (0.25 * parts["push"]) ** 2 * 4.0
    assert float(found["std"].sel(quantity="square")) == pytest.approx(square, rel=1e-6)


def test_at_scale_one_it_is_the_study_itself(study, single):
    found = what_if(single, np.ones(3))
    kept = nipc.load_result(study.folder / "study.work").dataset
    for name in ("std", "mean", "quantile", "inside_probability", "survival_probability"):
        assert found[name].values == pytest.approx(kept[name].values, abs=1e-9, nan_ok=True)
    assert kept_result(study, study.folder / "study.work") is not None
    assert kept_result(nipc.load_study(study.folder / "study.toml"), study.folder) is None


def test_a_quantity_without_spread_has_no_shares(single):
    found = what_if(single, np.ones(3)).isel(time=-1).sel(quantity="still")
    assert float(found["std"]) == 0.0
    assert np.isnan(found["driver_total"].values).all()
    assert any("still" in s and "undefined" in s for s in remarks(what_if(single, np.zeros(3))))


def test_a_moved_box(single):
    found = what_if(single, np.ones(3), {"x": (-0.4, np.inf)}).isel(time=-1).sel(quantity="x")
    inside = norm.cdf(0.4 / np.sqrt(variance(1, 1, 1)))
    assert float(found["inside_probability"]) == pytest.approx(inside, abs=0.02)
    assert float(found["box_high"]) == np.inf


def test_bad_questions_are_explained(study, single, tmp_path):
    for scale, words in (
        ({"pusch": 1.0}, "nothing is called 'pusch'.*there are: push, pull, start"),
        ({"push": -1.0}, "not a number from 0 upwards"),
    ):
        with pytest.raises(InputError, match=words):
            nipc.whatif(study, scale)
    with pytest.raises(InputError, match="no quantity is called 'z'; there are: x, square"):
        what_if(single, np.ones(3), {"z": (0.0, 1.0)})
    with pytest.raises(InputError, match="low end 2 must lie below 1"):
        what_if(single, np.ones(3), {"x": (2.0, 1.0)})
    with pytest.raises(InputError, match="nothing is inside it at the start"):
        what_if(single, np.ones(3), {"x": (50.0, 60.0)})
    with pytest.raises(InputError, match="needs 119 members; there are 60"):
        what_if(single, np.ones(3), members=60)
    with pytest.raises(InputError, match="nothing of this study has been run yet"):
        nipc.whatif(brownian(tmp_path / "never"))


def test_a_study_that_was_not_finished_says_what_it_lacks(tmp_path):
    made = brownian(tmp_path)
    run(made, backend="inline")
    more = brownian(tmp_path, BROWNIAN.replace("runs = 4", "runs = 6"))
    with pytest.raises(
        NipcError, match=r"needs at least \d+ more runs?, at check: nipc run .*toml"
    ):
        nipc.whatif(more)


def test_asking_makes_no_run(study):
    place = study.folder / "study.work" / "ledger.sqlite"
    before = place.read_bytes()
    nipc.whatif(study, {"push": 0.7})
    assert place.read_bytes() == before


@pytest.fixture(scope="module")
def chained(tmp_path_factory):
    made = spring(tmp_path_factory.mktemp("chained"))
    run(made, backend="inline")
    with reopened(made) as again:
        yield again


def test_a_chain_scaled_agrees_with_a_fresh_study(chained, tmp_path):
    """Half the noise, 1.5 times the start: the same histories, so that only expansions differ."""
    text = SPRING.replace("intensity = 0.02", "intensity = 0.01").replace("0.05", "0.075")
    fresh = run(spring(tmp_path / "fresh", text), backend="inline").dataset
    scaled = chained.scaled
    scales = scales_of(scaled.groups, {"force": 0.5, "draught": 0.5, "start": 1.5})
    found = what_if(scaled, scales, shares=False)
    ratio = found["std"].values[0] / fresh["std"].values[0]
    assert ratio == pytest.approx(np.ones(13), abs=0.01)
    gap = found["inside_probability"].values[0] - fresh["inside_probability"].values[0]
    assert np.abs(gap).max() < 0.01


def test_a_chain_reopened_is_the_chain(chained):
    kept = nipc.load_result(chained.folder).dataset
    found = what_if(chained.scaled, np.ones(3))
    # members that the study ran directly are expanded here
    assert found["std"].values == pytest.approx(kept["std"].values, rel=0.01)
    gap = found["driver_total"].values[:, 0, 1:] - kept["driver_total"].values[:, 0, 1:]
    assert np.abs(gap).max() < 1e-6 + 0.01


def test_shares_of_a_silenced_source_vanish(chained):
    scales = scales_of(chained.scaled.groups, {"force": 0.0})
    found = what_if(chained.scaled, scales, members=2000)
    share = found["driver_total"].sel(source="force").values[0, 1:]
    assert share == pytest.approx(np.zeros(12), abs=1e-12)


def test_orders_of_a_single_arc_are_exact(single):
    """y^2 is of order two in the push: mean 0.25^2 t, and nothing of order one."""
    orders = orders_in(single, np.array([True, False, False]))
    assert orders.std(1)[-1, 1] == pytest.approx(0.0, abs=1e-12)
    # 4,096 members: relative standard error sqrt(2 / 4096) = 0.022
    assert orders.mean(2)[-1, 1] == pytest.approx(0.25, rel=0.1)
    assert orders.beyond_linear()[-1, 0] == pytest.approx(0.0, abs=1e-6)


def test_a_sweep_tells_where_the_linear_picture_ends(study):
    data = nipc.sweep(study, [0.5, 1.0, 2.0], ["push"])
    whole = [np.sqrt(variance(1.0, s, 1.0)) for s in (0.5, 1.0, 2.0)]
    assert data["std"].sel(quantity="x").values[:, -1] == pytest.approx(whole, rel=1e-8)
    said = sweep_remarks(data)
    assert any(s.startswith("square: from scale 0.5 on") for s in said)
    assert not any(s.startswith("x:") for s in said)
    assert any("held-out paths were off" in s for s in said)
    with pytest.raises(InputError, match="nothing is called 'pusch'"):
        nipc.sweep(study, [1.0], ["pusch"])
    with pytest.raises(InputError, match="scale -1"):
        nipc.sweep(study, [-1.0])


def test_members_that_end_have_left_at_any_scale(tmp_path):
    """Lost where |x| > 1 was seen: at scale one as the study says, and fewer with less noise."""
    rates = tmp_path / "ending.py"
    rates.write_text(
        "import numpy as np\nfrom nipc import Ended\n\n"
        "def propagate(x0, times, forcing, parameters):\n"
        "    step = np.diff(times)[:, None] * np.array([forcing(t) for t in times[:-1]])\n"
        "    x = np.concatenate([[x0[0]], x0[0] + np.cumsum(step.sum(axis=1))])\n"
        "    gone = np.flatnonzero(np.abs(x) > 1.0)\n"
        "    if gone.size and gone[0] > 0:\n"
        "        raise Ended(times[gone[0] - 1 : gone[0] + 1].mean(), x[: gone[0], None])\n"
        "    return x[:, None]\n"
    )
    text = BROWNIAN[: BROWNIAN.index('[[state]]\nname = "y"')]
    text = text.replace(
        'adapter = "ode"\nrhs = "motion:rates"\nbatch = true\nmethod = "rk4"\nstep = 0.25',
        'adapter = "function"\nfunction = "ending:propagate"',
    )
    text += BROWNIAN[BROWNIAN.index("[[noise]]") : BROWNIAN.index('[[quantity]]\nname = "square"')]
    text = text.replace("box = [-1.0, 1.0]", "box = [-5.0, 5.0]").replace(
        "0.25\nterms", "0.4\nterms"
    )
    (tmp_path / "study.toml").write_text(text + '[design]\nkind = "sobol"\nruns = 200\n')
    made = nipc.load_study(tmp_path / "study.toml")
    kept = run(made, backend="inline").dataset
    with reopened(made) as again:
        scaled = again.scaled
    found = what_if(scaled, np.ones(3))
    for name in ("survival_probability", "survival_probability_low", "inside_probability"):
        assert found[name].values == pytest.approx(kept[name].values, abs=1e-9)
    assert float(found["survival_probability"][0, -1]) < 0.9
    less = what_if(scaled, scales_of(scaled.groups, {"push": 0.5}))
    assert (
        less["survival_probability"][0, -1] > found["survival_probability"][0, -1] + 0.05
    ).item()


def test_scaling_up_is_marked_and_its_intervals_hold_a_fresh_study(chained, tmp_path):
    """Twice and three times the noise: the potential ends near, and members pass outside."""
    scaled = chained.scaled
    told = {}
    for factor in (2.0, 3.0):
        text = SPRING.replace("intensity = 0.02", f"intensity = {0.02 * factor}")
        fresh = run(spring(tmp_path / f"{factor}", text), backend="inline").dataset
        scales = scales_of(scaled.groups, {"force": factor, "draught": factor})
        found = what_if(scaled, scales, shares=False)
        std = fresh["std"].values
        assert (found["std_low"].values <= std * (1 + 1e-9)).all()
        assert (found["std_high"].values >= std * (1 - 1e-9)).all()
        inside = fresh["inside_probability"].values
        assert (found["inside_probability_low"].values <= inside).all()
        assert (found["inside_probability_high"].values >= inside).all()
        told[factor] = found.attrs["far_share"], remarks(found)
    assert 0.02 < told[2.0][0] < told[3.0][0]
    assert all("outside what the runs cover" in said[0] for _, said in told.values())
    assert remarks(what_if(scaled, np.ones(3), shares=False)) == []


PARAMETER = """\
title = "drift of an uncertain rate"
seed = 3
[propagator]
adapter = "ode"
rhs = "drift:rates"
batch = true
method = "rk4"
step = 0.5
[clock]
end = 4.0
outputs = 5
period = 4.0
[[state]]
name = "x"
std = 0.1
[[parameter]]
name = "rate"
law = "uniform"
lower = 1.0
upper = 2.0
[[quantity]]
name = "x"
[ensemble]
members = 4096
[check]
runs = 3
"""


@pytest.mark.parametrize("arcs", [1, 2])
def test_a_parameter_is_scaled_about_its_mean(tmp_path, arcs):
    """x(4) = x_0 + 4 p, p uniform on [1, 2]: variance 0.1^2 + 16 s^2 / 12, mean 6 whatever s."""
    (tmp_path / "drift.py").write_text(
        "import numpy as np\n\ndef rates(t, x, xi, parameters):\n    return parameters[:, :1]\n"
    )
    (tmp_path / "study.toml").write_text(PARAMETER + f"[chain]\narcs = {arcs}\n")
    made = nipc.load_study(tmp_path / "study.toml")
    run(made, backend="inline")
    for scale in (0.0, 0.5, 2.0):
        found = nipc.whatif(made, {"rate": scale}).isel(time=-1, quantity=0)
        whole = np.sqrt(0.01 + 16 * scale**2 / 12)
        # 4,096 members: four standard errors are 4.5 % of a Gaussian's, less of a uniform's
        assert float(found["std"]) == pytest.approx(whole, rel=1e-6 if arcs == 1 else 0.045)
        assert float(found["mean"]) == pytest.approx(6.0, abs=4 * whole / 64)
        share = float(found["driver_total"].sel(source="rate"))
        assert share == pytest.approx(1 - 0.01 / whole**2, abs=1e-6 if arcs == 1 else 0.06)
