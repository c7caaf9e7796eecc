"""A whole chain on Brownian motion: survival in a box, its shift, and who drives the leaving."""

from __future__ import annotations

import numpy as np
import pytest
from answer_problems import Stepper, linear, solved

from nipc.errors import InputError
from nipc.problem.study import Study

SIGMA, HALF, END = 0.8, 1.0, 2.0


def study(**more):
    settings = {
        "title": "invented", "seed": 6, "tolerance": 0.05, "propagator": {"adapter": "ode"},
        "clock": {"end": END, "outputs": 51}, "state": [{"name": "x"}],
        "noise": [{"name": "push", "intensity": SIGMA, "terms": 16}],
        "quantity": [{"name": "x", "box": [-HALF, HALF]}],
        "chain": {"arcs": 10}, "ensemble": {"members": 20_000},
    }  # fmt: skip
    return Study(**settings | more)


STILL = Stepper(linear(np.zeros((1, 1)), np.ones((1, 1))), 0.01)


def series(times, half):
    """4/pi sum (-1)^k / (2k+1) exp(-(2k+1)^2 pi^2 sigma^2 t / 8 a^2) (Redner 2001; Feller II)."""
    k = np.arange(200)[:, None]
    decay = np.exp(-((2 * k + 1) ** 2) * np.pi**2 * SIGMA**2 * times / (8 * half**2))
    return 4 / np.pi * np.sum((-1.0) ** k / (2 * k + 1) * decay, axis=0)


def test_survival_of_brownian_motion_seen_now_and_then():
    """The series with the box widened by 0.5826 sigma sqrt(dt) (Broadie, Glasserman & Kou 1997).

    Four standard errors of 20,000 members and 0.003 for the step's order, as in
    tests/published/test_first_exit.py; and 0.01 for what 16 terms an arc lose of five steps.
    """
    data = solved(study(), STILL)
    times = data["time"].values[5:]
    exact = series(times, HALF + 0.5826 * SIGMA * np.sqrt(END / 50))
    found = data["survival_probability"].values[0, 5:]
    error = np.sqrt(exact * (1 - exact) / 20_000)
    assert np.all(np.abs(found - exact) <= 4 * error + 0.013)
    assert np.abs(found - series(times, HALF)).max() > 0.05
    assert float(data["exit_driver_total"].sel(source="push")[0]) == pytest.approx(1.0, abs=0.05)
    assert str(data["spreading_verdict"].values[0]) == "diffusive"
    # 20,000 members know a variance to 1 %
    assert float(data["diffusion_coefficient"][0]) == pytest.approx(SIGMA**2 / 2, rel=0.03)


def test_nothing_inside_at_the_start_is_refused():
    """A box that holds nothing where the motion begins: which, where from, and what it holds."""
    with pytest.raises(
        InputError, match=r"'x': nothing is inside it at the start .* runs from 0 to"
    ):
        solved(study(quantity=[{"name": "x", "box": [0.5, 1.5]}]), STILL)


@pytest.mark.parametrize("arcs", [1, 4])
def test_a_quantity_without_variance_has_no_shares_and_it_is_said(arcs):
    quantity = [{"name": "x"}, {"name": "still", "expression": "1000 + 0*x"}]
    noise = [{"name": "push", "intensity": SIGMA, "terms": 4}]
    more = {"quantity": quantity, "chain": {"arcs": arcs}, "noise": noise}
    data = solved(study(expansion={"degree": 1}, ensemble={"members": 2000}, **more), STILL)
    flat = data.sel(quantity="still")
    assert np.isnan(flat["driver_total"]).all()
    assert np.isnan(flat["nonlinear_share"]).all()
    assert np.isnan(flat["band_share"]).all()
    assert str(flat["spreading_verdict"].item()) == "no spread"
    assert "driver shares are undefined" in data.attrs["findings"]
    assert float(data.sel(quantity="x")["driver_total"][0, -1]) == pytest.approx(1.0, abs=0.1)
