"""Figures show what the dataset holds, leave out what it lacks, and keep their labels apart."""

from __future__ import annotations

import warnings
from itertools import combinations
from pathlib import Path

import matplotlib
import numpy as np
import pytest
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.collections import PolyCollection
from matplotlib.figure import Figure
from matplotlib.text import Text

from nipc.problem.noise import CompletedKarhunenLoeve, KarhunenLoeve
from nipc.report import figures, headline, hover, save_figures, tables
from nipc.report.style import LIGHT

RESULTS = ("slot", "hard", "minimal")


def first_axes(drawn: Axes | tuple[Axes, ...]) -> Axes:
    return drawn[0] if isinstance(drawn, tuple) else drawn


def line(ax: Axes, colour: str, index: int = 0) -> np.ndarray:
    found = [each for each in ax.lines if each.get_color() == LIGHT[colour]]
    return np.asarray(found[index].get_ydata(), float)


def test_a_result_fills_the_figures_it_can(
    slot: xr.Dataset, hard: xr.Dataset, minimal: xr.Dataset
) -> None:
    names = {entry.name for entry in figures.catalogue(slot)}
    # the chart's plane is for results of a single quantity
    assert names == set(figures.__all__) - {"Entry", "catalogue", "chart_density"}
    assert "confinement" not in {entry.name for entry in figures.catalogue(hard)}  # it has no box
    assert [(e.name, e.quantity) for e in figures.catalogue(minimal)] == [
        ("bands", "position"),
        ("diffusion", "position"),
    ]


@pytest.mark.parametrize("result", RESULTS)
def test_every_figure_is_legible(result: str, request: pytest.FixtureRequest) -> None:
    """No two texts meet, none leaves the figure, every axis says what it shows, nothing warns."""
    dataset = request.getfixturevalue(result)
    for entry in figures.catalogue(dataset):
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            ax = first_axes(entry.draw())
            figure = ax.figure
            canvas = FigureCanvasAgg(figure)
            canvas.draw()
        where = f"{result}: {entry.name} of {entry.of}"
        whole = figure.bbox.padded(1.0)
        boxes = []
        for text in figure.findobj(Text):
            if not (text.get_visible() and text.get_text().strip()):
                continue
            box = text.get_window_extent(canvas.get_renderer())
            if box.width == 0 or box.height == 0 or _is_hidden_tick(text, figure):
                continue
            held = min(box.x0 - whole.x0, whole.x1 - box.x1, box.y0 - whole.y0, whole.y1 - box.y1)
            assert held >= 0, f"{where}: {text.get_text()!r} is cut off"
            boxes.append((text.get_text(), box))
        for (one, box), (other, another) in combinations(boxes, 2):
            room = box.padded(-1.0), another.padded(-1.0)
            assert not room[0].overlaps(room[1]), f"{where}: {one!r} meets {other!r}"
        for each in figure.axes:
            assert each.get_ylabel() or [t for t in each.get_yticklabels() if t.get_text()], where
        assert figure.axes[-1].get_xlabel(), where


def _is_hidden_tick(text: Text, figure: Figure) -> bool:
    """Matplotlib keeps tick labels outside the view and does not draw them."""
    for ax in figure.axes:
        for axis, (low, high) in ((ax.xaxis, ax.get_xlim()), (ax.yaxis, ax.get_ylim())):
            for tick in axis.get_major_ticks() + axis.get_minor_ticks():
                if text in (tick.label1, tick.label2):
                    low, high = sorted((low, high))
                    slack = 1e-9 * (high - low)
                    shown = low - slack <= tick.get_loc() <= high + slack
                    return not shown or not text.get_visible()
    return False


def test_bands_show_the_quantiles(slot: xr.Dataset) -> None:
    ax = figures.bands(slot, "longitude")
    median = slot["quantile"].sel(quantity="longitude", level=0.5).values
    assert np.array_equal(line(ax, "main"), median)
    edges = [each.get_ydata()[0] for each in ax.lines if each.get_color() == LIGHT["edge"]]
    assert edges == [74.95, 75.05]
    assert ax.get_ylabel() == "longitude (deg)"
    assert ax.get_xlabel() == "time (d)"


def test_without_quantiles_a_band_is_mean_and_spread(minimal: xr.Dataset) -> None:
    ax = figures.bands(minimal, "position")
    band = next(c for c in ax.collections if isinstance(c, PolyCollection))
    top = band.get_paths()[0].vertices[:, 1].max()
    assert top == pytest.approx(5.0 + 1.96 * np.sqrt(1000 / 3))
    assert "mean ± 1.96 std" in [t.get_text() for t in ax.get_legend().get_texts()]


def zones(ax: Axes) -> list[tuple[float, float]]:
    """Spans over the whole height: the shading of what lies past the trust horizons."""
    found = []
    for shade in ax.collections:
        corners = shade.get_paths()[0].vertices if shade.get_paths() else np.zeros((0, 2))
        if len(corners) and set(np.unique(corners[:, 1])) == {0.0, 1.0}:
            found.append((float(corners[:, 0].min()), float(corners[:, 0].max())))
    return sorted(set(found))


def test_what_lies_past_the_trust_horizon_is_marked(slot: xr.Dataset, hard: xr.Dataset) -> None:
    for figure in (figures.bands, figures.confinement, figures.driver_shares):
        ax = figure(slot, "longitude")
        assert zones(ax) == [(9.2, 21.0), (21.0, 28.0)]
        said = [text.get_text() for text in ax.texts]
        assert any("paths 9.2" in words and "distribution 21" in words for words in said)
    assert zones(figures.bands(slot, "radius")) == []
    unchecked = figures.bands(hard, str(hard["quantity"].values[2]))
    assert zones(unchecked) == [(0.0, 50.0)]
    assert any("not checked" in text.get_text() for text in unchecked.texts)


def test_the_law_is_drawn_on_the_clock_of_the_study(slot: xr.Dataset) -> None:
    """A study that starts at t = 100: elapsed time below, horizons moved with it."""
    moved = slot.assign_coords(time=slot["time"] + 100.0)
    for name in ("trust_horizon", "trust_horizon_distribution"):
        moved[name] = moved[name] + 100.0
    for dataset in (slot, moved):
        ax = figures.diffusion(dataset, "longitude")
        assert np.array(zones(ax)) == pytest.approx(np.array([[9.2, 21.0], [21.0, 28.0]]))
        law = line(ax, "edge")
        elapsed = np.asarray(slot["time"].values)[1:]
        inside = np.isfinite(law)
        assert law[inside] == pytest.approx(2 * 2.4e-8 * elapsed[inside] ** 2.8)


def test_a_blow_up_past_the_horizon_does_not_hide_what_is_trusted(hard: xr.Dataset) -> None:
    ax = figures.bands(hard, "x")
    low, high = ax.get_ylim()
    assert -10 < low < -1
    assert 1 < high < 10
    assert "view cut" in ax.get_xlabel()


def test_a_box_that_is_far_away_is_told_and_not_shown(slot: xr.Dataset) -> None:
    far = slot.copy()
    far["box_high"] = ("quantity", [42170.0, 99.0, np.nan])
    ax = figures.bands(far, "longitude")
    assert ax.get_ylim()[1] < 76
    labels = [text.get_text() for text in ax.get_legend().get_texts()]
    assert "box (99 off the scale)" in labels


def test_shares_are_stacked_to_the_last_source(slot: xr.Dataset) -> None:
    """At the end of longitude, stacked by hand: the top of the tangential area."""
    ax = figures.driver_shares(slot, "longitude")
    shares = slot["driver_first"].sel(quantity="longitude").isel(time=-1).values
    tops = [c.get_paths()[0].vertices for c in ax.collections if isinstance(c, PolyCollection)]
    at_end = [area[area[:, 0] == 28.0, 1].max() for area in tops[:3]]
    assert at_end == pytest.approx(np.cumsum(shares), rel=1e-12)


def test_more_than_seven_sources_are_put_together(hard: xr.Dataset) -> None:
    ax = figures.driver_shares(hard, "x")
    labels = [text.get_text() for text in ax.get_legend().get_texts()]
    assert "2 smaller ones" in labels
    assert "\u200a_hidden" in labels  # a leading underscore would hide it


def test_ranking_is_sorted_by_total_share(slot: xr.Dataset) -> None:
    ax = figures.driver_ranking(slot, "longitude")
    names = [text.get_text() for text in ax.get_yticklabels()]
    total = slot["driver_total"].sel(quantity="longitude").isel(time=-1)
    expected = [str(total["source"].values[i]) for i in np.argsort(-total.values)]
    assert names == expected == ["tangential", "start", "radial"]


def test_what_is_missing_is_said(minimal: xr.Dataset) -> None:
    with pytest.raises(KeyError, match="no driver shares"):
        figures.driver_shares(minimal, "position")
    with pytest.raises(KeyError, match="no quantity 'speed'; there are position"):
        figures.bands(minimal, "speed")
    with pytest.raises(KeyError, match="no arcs"):
        figures.chain(minimal)


def test_axes_of_the_caller_are_used_and_style_does_not_leak(slot: xr.Dataset) -> None:
    figure = Figure()
    ax = figure.add_subplot()
    before = matplotlib.rcParams["font.size"]
    assert figures.bands(slot, "radius", ax=ax) is ax
    assert matplotlib.rcParams["font.size"] == before
    axes = figures.chain(slot, axes=Figure().subplots(4, 1))
    assert len(axes) == 4


def test_the_noise_figure_states_what_the_basis_loses() -> None:
    """After N = 4 terms the path loses 1 - sum 2 / ((k - 1/2) pi)^2 ... of its mean square.

    Karhunen-Loeve: eigenvalues 1 / ((k - 1/2) pi)^2, their sum 1/2. The end value loses as much
    as sum 2 / ((k - 1/2) pi)^2 over k > N, since F_k(1)^2 = 2 / ((k - 1/2) pi)^2.
    """
    k = np.arange(1, 5) - 0.5
    lost = 1 - 2 * np.sum(1 / (k * np.pi) ** 2)
    words = figures.noise_kept(KarhunenLoeve(4)).get_xlabel()
    assert f"lost: {100 * lost:.2g} % of the path, {100 * lost:.2g} % of the end" in words
    assert "0 % of the end" in figures.noise_kept(CompletedKarhunenLoeve(4)).get_xlabel()


def test_the_kept_path_ends_where_a_complete_basis_ends_it() -> None:
    """A basis that holds the constant keeps W(1) exactly, whatever the path."""
    ax = figures.noise_kept(CompletedKarhunenLoeve(3), seed=5)
    path, kept = (np.asarray(each.get_ydata()) for each in ax.lines[:2])
    assert kept[-1] == pytest.approx(path[-1], abs=2e-3)  # quadrature over 1500 kicks


def test_figures_are_saved_in_every_form(hard: xr.Dataset, tmp_path: Path) -> None:
    written = save_figures(hard, tmp_path, formats=("svg",))
    assert len({path.name for path in written}) == len(written)
    assert len(written) == len(list(figures.catalogue(hard)))
    assert all(path.parent == tmp_path and path.stat().st_size > 1000 for path in written)
    assert all(c.isalnum() or c in "-_." for path in written for c in path.name)
    one = hard.isel(quantity=[0])[["mean", "std"]]
    kinds = {p.suffix for p in save_figures(one, tmp_path / "all")}
    assert kinds == {".png", ".svg", ".pdf"}
    assert (tmp_path / "all" / "bands-x.png").read_bytes().startswith(b"\x89PNG")
    assert (tmp_path / "all" / "bands-x.pdf").read_bytes().startswith(b"%PDF")


def test_a_joint_box_is_marked_past_the_earliest_horizon(slot: xr.Dataset) -> None:
    ax = figures.joint_confinement(slot, "slot")
    assert zones(ax) == [(9.2, 21.0), (21.0, 28.0)]  # those of longitude
    assert np.array_equal(line(ax, "main", -1), slot["joint_inside_probability"].values[0])
    with pytest.raises(KeyError, match="no joint box 'other'"):
        figures.joint_confinement(slot, "other")


@pytest.mark.parametrize("shift", [0.0, 2460000.5, -3.0e9])
def test_a_clock_far_from_zero_has_short_ticks(slot: xr.Dataset, shift: float) -> None:
    """A Julian date, or seconds since long ago: what is common goes into the label."""
    moved = slot.assign_coords(time=slot["time"] + shift)
    ax = figures.spread_rate(moved)
    FigureCanvasAgg(ax.figure).draw()
    assert ax.get_xlabel().startswith("time")
    assert all(len(text.get_text()) <= 7 for text in ax.get_xticklabels())
    assert not ax.xaxis.get_offset_text().get_text()


def test_bands_stack_to_what_the_noise_gives_and_the_peak_is_told(slot: xr.Dataset) -> None:
    """Each source's bands add up to its first share at that time; the start has no frequencies."""
    ax = figures.driver_bands(slot, "longitude")
    heights = sum(bar.get_height() for bar in ax.patches if bar.get_width() and bar.get_height())
    first = slot["driver_first"].sel(quantity="longitude", source=["radial", "tangential"])
    span = 1.0  # the marked interval is a patch of height one
    assert heights - span == pytest.approx(float(first.isel(time=-1).sum()), abs=1e-6)
    words = " ".join(text.get_text() for text in ax.texts)
    assert "period 1" in words
    assert "80 %" in words
    with pytest.raises(KeyError, match="which frequencies"):
        figures.driver_bands(slot.drop_vars("band_share"), "longitude")


def test_exponents_and_their_members(slot: xr.Dataset) -> None:
    ax = figures.lyapunov_exponents(slot)
    np.testing.assert_allclose(line(ax, "main")[1:], slot["lyapunov_exponent"][2, 1:])
    np.testing.assert_allclose(line(ax, "soft")[1:], np.log(10) / slot["time"].values[1:])
    with pytest.raises(KeyError, match="Lyapunov"):
        figures.lyapunov_exponents(slot.drop_vars("lyapunov_exponent"))


def arcs(ends: list[float], last: float, notes: list[str]) -> xr.Dataset:
    """A result with these arcs over a horizon to `last`."""
    count = len(ends)
    return xr.Dataset(
        {
            "arc_start": ("arc", [0.0, *ends[:-1]]),
            "arc_end": ("arc", ends),
            "arc_degree": ("arc", [2] * count),
            "arc_terms": ("arc", [17] * count),
            "arc_runs": ("arc", [24] * count),
            "arc_failed": ("arc", [0] * (count - 1) + [5]),
            "arc_error": ("arc", [1e-3] * count),
            "arc_allowed": ("arc", [2e-3] * count),
            "arc_note": ("arc", notes),
        },
        coords={"time": ("time", np.linspace(0.0, last, 11), {"units": "d"}), "quantity": ["x"]},
    )


def labels_of(ax: Axes) -> list[str]:
    legend = ax.get_legend()
    assert legend is not None
    return [text.get_text() for text in legend.get_texts()]


def test_arcs_of_unequal_length_stand_as_long_as_they_are() -> None:
    data = arcs([1.0, 2.0, 2.5, 4.5], 5.0, ["", "halved (3 % off)", "halved (8 % off); easy", ""])
    length, degree, runs, error, why = figures.chain(data)
    assert [ax.get_ylabel() for ax in (length, degree, runs, error, why)] == [
        "length (d)", "degree", "runs", "error", "why"
    ]  # fmt: skip
    values, edges, _ = length.patches[0].get_data()
    assert values == pytest.approx([1.0, 1.0, 0.5, 2.0])
    assert edges == pytest.approx([0.0, 1.0, 2.0, 2.5, 4.5])
    assert labels_of(runs) == ["runs", "of these failed", "terms"]
    assert labels_of(error) == ["held-out error", "allowed"]
    assert [text.get_text() for text in why.texts] == ["halved", "easy"]
    spans = [path.get_extents().intervalx for path in why.collections[0].get_paths()]
    assert np.array(spans) == pytest.approx(np.array([[1.0, 2.0], [2.0, 2.5]]))
    # the chain ends before the horizon, and the figure says so
    assert why.get_xlim() == (0.0, 5.0)
    assert "no arcs" in [text.get_text() for text in length.texts]
    whole = figures.chain(arcs([1.0, 2.0], 2.0, ["", ""]))
    assert [ax.get_ylabel() for ax in whole] == ["degree", "runs", "error"]
    assert not whole[0].texts


def test_failed_runs_are_told_apart_only_where_chance_would_not_do_it() -> None:
    """40 failed runs two standard deviations higher in x: P(beyond) = Phi(sqrt 2) = 0.92."""
    rng = np.random.default_rng(4)
    good = rng.standard_normal((200, 2))
    failed = rng.standard_normal((40, 2)) + np.array([2.0, 0.0])
    data = xr.Dataset(
        {
            "failed_position": (("failed_run", "direction"), failed),
            "good_position": (("good_run", "direction"), good),
        },
        coords={"direction": ["x", "f[1]"]},
    )
    ax = figures.failure_places(data)
    rows = dict(
        zip(
            (label.get_text() for label in ax.get_yticklabels()),
            (text.get_text() for text in ax.texts),
            strict=True,
        )
    )
    share = int(rows["x"].removesuffix("% higher"))
    assert abs(share - 92) <= 5  # standard error 2
    assert rows["f[1]"] == "no sign"
    assert rows["distance from the\ncentre"].endswith("higher")


def test_a_share_estimated_above_one_is_drawn_as_one(slot: xr.Dataset) -> None:
    over = slot.copy(deep=True)
    for name in ("driver_total", "driver_total_low", "driver_total_high"):
        over[name].loc[{"quantity": "radius", "source": "radial"}] = {"driver_total": 1.02}.get(
            name, 1.3 if name.endswith("high") else 0.8
        )
    ax = figures.driver_ranking(over, "radius")
    assert "100\u202f%" in [text.get_text() for text in ax.texts]
    right = ax.get_xlim()[1]
    assert all(text.xy[0] <= 1.0 < right for text in ax.texts)
    assert max(line.get_xdata().max() for line in ax.lines) <= 1.0


def test_the_law_is_drawn_with_its_offset(slot: xr.Dataset) -> None:
    """A + 2 D t where the verdict is diffusive, whatever the exponent's estimate."""
    told = slot.assign(diffusion_offset=("quantity", [0.05, 0.0, 0.0]))
    ax = figures.diffusion(told, "radius")
    assert "A + 2 D t, α = 1.02 (0.96 to 1.08)" in labels_of(ax)
    drawn = next(each for each in ax.lines if each.get_color() == LIGHT["edge"])
    times, law = (np.asarray(side, float) for side in drawn.get_data())
    known = np.isfinite(law)
    assert known.sum() > 100
    assert law[known] == pytest.approx(0.05 + 2 * 8.5e-3 * times[known])


def test_shares_that_are_not_known_are_not_told(slot: xr.Dataset) -> None:
    """From output 200 on the interval of one source's total share is as good as all of 0 to 1."""
    wide = slot.copy(deep=True)
    at = {"quantity": "radius", "source": "radial", "time": slot["time"].values[200:]}
    wide["driver_total_low"].loc[at] = -2.0
    wide["driver_total_high"].loc[at] = 3.0
    assert headline.rows(slot)[0].cells[3].main == "start"
    assert headline.rows(wide)[0].cells[3].main == "not known"
    drawn = figures.driver_ranking(wide, "radius")
    assert "not known" in [text.get_text() for text in drawn.texts]
    stack = figures.driver_shares(wide, "radius")
    assert "blank where the shares are not known" in stack.get_xlabel()
    reach = max(c.get_datalim(stack.transData).x1 for c in stack.collections[:3])
    assert reach == pytest.approx(slot["time"].values[199])
    assert "blank" not in figures.driver_shares(wide, "longitude").get_xlabel()
    found = hover.lines(wide, "driver_shares", "radius")
    assert np.isnan(np.asarray(found[0].values, float)[200:]).all()
    assert tables.moments(wide, "radius").rows[-1][-1] == "not known"


def test_one_quantity_has_the_plane_of_the_chart(minimal: xr.Dataset) -> None:
    """Two components that spread, a third that does not: points where the members are."""
    rng = np.random.default_rng(8)
    cloud = np.stack([rng.standard_normal((80, 5)), 3.0 + rng.standard_normal((80, 5))], axis=1)
    cloud = np.concatenate([cloud, np.ones((80, 1, 5))], axis=1)
    told = minimal.assign(
        cloud_chart=(("cloud_member", "component", "cloud_time"), cloud),
        component=["p", "q", "still"],
        cloud_time=np.linspace(0.0, 10.0, 5),
    )
    entry = next(e for e in figures.catalogue(told) if e.name == "chart_density")
    assert entry.of == ("p", "q")
    ax = entry.draw()
    assert (ax.get_xlabel(), ax.get_ylabel()) == ("p", "q")
    # never checked against direct runs: each time is marked
    assert labels_of(ax) == ["2.5\u202fs‡", "5\u202fs‡", "7.5\u202fs‡", "10\u202fs‡"]
    assert ax.lines[-1].get_ydata()[:3] == pytest.approx(cloud[:3, 1, -1])
    with pytest.raises(KeyError, match="no component 'z'; there are p, q, still"):
        figures.chart_density(told, "p", "z")
    with pytest.raises(KeyError, match="no members in a chart"):
        figures.chart_density(minimal, "p", "q")
