"""Allowances of a solved study against closed forms; direct runs that confirm them."""

from __future__ import annotations

import json

import numpy as np
import pytest
from asked_studies import BROWNIAN, brownian, variance
from scipy.stats import norm

import nipc
from nipc.answers.allowances import allowances, remarks
from nipc.answers.confirmation import confirm
from nipc.errors import InputError
from nipc.questions import find_allowances, reopened
from nipc.report import tables
from nipc.workflow import run


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    # a quarter of the start's spread, so that the target can be reached by each source
    text = BROWNIAN.replace("std = 0.3", "std = 0.15")
    made = brownian(tmp_path_factory.mktemp("allowed"), text)
    run(made, backend="inline")
    return made


def allowed(target: float) -> dict[str, float]:
    """P(|x| < 1) >= target where Var x <= 1 / z^2: solved for each factor, others at one."""
    most = norm.ppf(0.5 + 0.5 * target) ** -2.0
    parts = {"push": 0.25**2 * 4, "pull": 0.1**2 * 4, "start": 0.15**2}
    whole = sum(parts.values())
    assert variance(0.5, 1, 1) == pytest.approx(whole)
    single = {name: np.sqrt((most - whole + v) / v) for name, v in parts.items()}
    return single | {"noise": np.sqrt((most - parts["start"]) / (whole - parts["start"]))}


def test_each_source_in_closed_form(study):
    target = 0.9
    data = nipc.allowance(study, target)
    expected = allowed(target)
    x = data.sel(quantity="x")
    for name in ("push", "pull", "start"):
        one = x.sel(source=name)
        value, low, high = (float(one[f"allowance_scale{e}"]) for e in ("", "_low", "_high"))
        assert low <= expected[name] <= high  # 95 % each; the seed is fixed
        assert value == pytest.approx(expected[name], rel=0.1)
    assert float(x["allowance"].sel(source="push")) == pytest.approx(
        0.25 * float(x["allowance_scale"].sel(source="push"))
    )
    assert float(data["joint_allowance_scale"].sel(quantity="x")) == pytest.approx(
        expected["noise"], rel=0.05
    )
    grid = data["pair_probability"].sel(quantity="x", pair="push, pull")
    inside = 2 * norm.cdf(1 / np.sqrt(variance(0.5, 2.0, 0.25))) - 1
    assert float(grid.sel(first_scale=2.0, second_scale=0.25)) == pytest.approx(inside, abs=0.04)
    # quantities without a box are not spoken of
    assert np.isnan(data["allowance_scale"].sel(quantity="square").values).all()


def test_direct_runs_confirm_and_the_page_learns_of_it(study):
    data, confirmed, kept = find_allowances(study, 0.9, confirming=6, backend="inline")
    assert kept
    assert [one.source for one in confirmed] == ["push", "pull", "start"]
    for one in confirmed:
        # a linear motion: every direct run ends as its expansion says
        assert (one.pairs, one.changed) == (6, 0)
        assert one.together.value == pytest.approx(0.9, abs=0.01)
        assert one.together.low <= 0.9 <= one.together.high
    result = nipc.load_result(study.folder / "study.work").dataset
    scale = float(result["allowance_scale"].sel(source="push", quantity="x"))
    assert scale == float(data["allowance_scale"].sel(source="push", quantity="x"))
    assert any("To keep P(inside) of x at 0.9" in s for s in json.loads(result.attrs["findings"]))
    table = tables.allowances(result)
    assert "with P(in the box at the end) at 0.9 or above" in table.caption
    push = next(row for row in table.rows if row[0] == "push")[1]
    assert push.startswith(f"{0.25 * scale:.3g} (")
    assert push.endswith("m/s^0.5")
    with reopened(study) as again:
        # the ledger has them now: asked again, nothing is run
        again_confirmed = confirm(again.scaled, data, 6)
    assert [one.together for one in again_confirmed] == [one.together for one in confirmed]


def test_survival_asks_for_more_than_inside(study):
    with reopened(study) as again:
        inside = allowances(again.scaled, 0.9, "inside", members=2000)
        stayed = allowances(again.scaled, 0.9, "survival", members=2000)
    one, two = (
        float(d["allowance_scale"].sel(source="push", quantity="x")) for d in (inside, stayed)
    )
    assert two < one


def test_targets_out_of_reach_and_bad_ones(study):
    with reopened(study) as again:
        data = allowances(again.scaled, 0.9999, members=2000)
        said = " ".join(remarks(data))
        assert "x: no strength of pull alone keeps P(inside) at 0.9999" in said
        assert "from 0 to 8 times its strength P is" in said
        easy = allowances(again.scaled, 0.01, members=1000)
        assert np.isinf(easy["allowance_scale"].sel(quantity="x").values).all()
        assert "beyond that" in " ".join(remarks(easy))
        for target, box, words in (
            (1.0, None, "target 1 is no probability"),
            (0.9, "square", "no box belongs to 'square'; there are boxes of: x"),
        ):
            with pytest.raises(InputError, match=words):
                allowances(again.scaled, target, box_of=box)


def test_without_a_box(tmp_path):
    made = brownian(tmp_path, BROWNIAN.replace("box = [-1.0, 1.0]\n", ""))
    run(made, backend="inline")
    with pytest.raises(InputError, match="the study has no box"):
        nipc.allowance(made)
