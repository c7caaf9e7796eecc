"""The page's what-if panel against the chain and the arc that its numbers come from."""

from __future__ import annotations

import numpy as np
import pytest
from asked_studies import brownian, spring

from nipc.answers.panel_data import design_of, held_back, powers_of, rows_of
from nipc.answers.scales import scales_of
from nipc.answers.whatif import what_if
from nipc.questions import reopened
from nipc.report import panel
from nipc.workflow import run, write_report

SCALES = (
    {},
    {"force": 0.3, "push": 0.3},
    {"force": 1.6, "draught": 0.4, "push": 1.6, "pull": 0.0},
    {"start": 0.0},
    {"start": 1.5, "draught": 0.0},
)


@pytest.fixture(scope="module", params=["arc", "chain"])
def solved(request, tmp_path_factory):
    folder = tmp_path_factory.mktemp(request.param)
    study = brownian(folder) if request.param == "arc" else spring(folder)
    result = run(study, backend="inline")
    with reopened(study) as again:
        return result, again.scaled


@pytest.mark.parametrize("given", SCALES)
def test_the_panel_says_what_whatif_says(solved, given):
    result, scaled = solved
    known = {name: factor for name, factor in given.items() if name in scaled.names}
    scales = scales_of(scaled.groups, known)
    kept = panel.read(result.dataset)
    assert kept is not None
    rows = np.searchsorted(scaled.times, kept.times)
    # the very same members: plotting accuracy is a hundredth of the spread
    members = scaled.members(scales, 0, kept.terms.shape[1])[:, rows, 0]
    found = panel.answer(kept, scales, 0, -0.6, 0.6)
    spread = np.maximum(members.std(axis=0), 0.1 * members.std(axis=0).max())
    if spread.max() > 0:
        assert np.max(np.abs(found.std - members.std(axis=0)) / spread) < 0.01
        quantiles = np.quantile(members, panel.LEVELS, axis=0)
        assert np.max(np.abs(found.quantiles - quantiles) / spread) < 0.03  # third order is cut
    inside = ((members >= -0.6) & (members <= 0.6)).mean(axis=0)
    assert np.max(np.abs(found.inside - inside)) < 0.01
    # and the whole ensemble, up to the chance of the panel's few members: five standard errors
    whole = what_if(scaled, scales, {"x": (-0.6, 0.6)})
    p = whole["inside_probability"].values[0, rows]
    error = 5.0 * np.sqrt(p * (1.0 - p) / kept.terms.shape[1]) + 0.01
    assert (np.abs(found.inside - p) <= error).all()
    total = whole["driver_total"].values[:, 0, rows[-1]]
    if np.isfinite(total).all():
        assert found.total[:, -1] == pytest.approx(total, abs=0.12)


def test_what_the_panel_is_off_by_is_told(solved):
    data = solved[0].dataset
    assert (data["panel_scale_low"] == 0.0).all()
    assert (data["panel_scale_high"] >= 1.0).all()
    # quantities without spread have no error to tell
    moving = data["panel_error"].sel(quantity="x").values
    assert np.isfinite(moving).all()
    assert moving.max() < 0.05
    words = " ".join([panel.warning(data), *panel.remarks(data)])
    assert "nipc whatif is the reference" in words
    assert "members differ from the chain itself by" in words


def test_a_page_with_it_stays_small(solved):
    result, _ = solved
    page = write_report(result)
    assert page.stat().st_size < 5_000_000
    assert 'id="panel-data"' in page.read_text(encoding="utf-8")


def test_terms_and_designs():
    powers = powers_of(3)
    assert len({tuple(row) for row in powers.tolist()}) == len(powers) == 10
    assert powers.sum(axis=1).max() == 2
    points = design_of(["noise", "start", "parameter"])
    matrix = np.prod(points[:, None, :] ** powers[None], axis=2)
    assert np.linalg.matrix_rank(matrix) == 10
    assert np.linalg.cond(matrix) < 100.0
    assert (points[:, 2] >= 0.0).all()  # a parameter is never mirrored
    assert not {tuple(p) for p in held_back(3)} & {tuple(p) for p in points}


def test_times_keep_the_phase_of_an_oscillation():
    times = np.linspace(0.0, 28.0, 113)  # four a day
    assert rows_of(times, 1.0, 33).tolist() == list(range(0, 113, 4))
    assert rows_of(times, 1.0, 20).tolist() == list(range(0, 113, 8))
    # 7 days would leave 5 times, and 0.9 days are no whole number of steps: evenly then
    for period in (7.0, 0.9, None):
        rows = rows_of(times, period, 33)
        assert rows.size == 33
        assert (rows[0], rows[-1]) == (0, 112)
    assert rows_of(times[:10], 1.0, 33).tolist() == list(range(10))
