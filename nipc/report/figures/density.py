"""The ensemble in the plane of two quantities, at several times."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from nipc.arrays import FloatArray
from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.numbers import amount
from nipc.report.style import LIGHT, drawn, line_stroke

POINTS = 70
INSIDE = 0.9
ENOUGH = 60
"""Members from which a density is estimated; with fewer, points alone are shown."""


@drawn
def density(
    dataset: xr.Dataset,
    horizontal: str,
    vertical: str,
    times: Sequence[float] | None = None,
    ax: Axes | None = None,
) -> Axes:
    """Members at some times, with the line that holds the densest 90 % of them.

    `times`: at most four; by default, four spread over the time for which both distributions can
    be trusted, or over all of it. The nearest that the ensemble is kept at are taken. A time past
    a trust horizon is marked in the legend.
    """
    found = ensemble(dataset)
    if found is None:
        raise KeyError("the result keeps no ensemble")
    values, kept = found
    columns = [reading.position(dataset, name) for name in (horizontal, vertical)]
    trusts = [reading.trust(dataset, name) for name in (horizontal, vertical)]
    ax = frame.new_axes(ax, height=4.2)
    clouds = [values[:, column] for column in columns]
    handles, labels = _clouds(ax, dataset, clouds, kept, trusts, times)
    for edges, draw in (
        (reading.box(dataset, horizontal), ax.axvline),
        (reading.box(dataset, vertical), ax.axhline),
    ):
        low, high = ax.get_xlim() if draw == ax.axvline else ax.get_ylim()
        for edge in edges.edges if edges is not None else []:
            if low <= edge <= high:
                draw(edge, color=LIGHT["edge"], lw=1.3, ls=(0, (7, 2, 1.5, 2)))
    frame.value_axis(ax, frame.printable(vertical), reading.unit(dataset, vertical))
    frame.value_axis(ax, frame.printable(horizontal), reading.unit(dataset, horizontal), "x")
    ax.locator_params(axis="x", nbins=6)
    frame.legend(ax, handles, labels)
    return ax


@drawn
def chart_density(
    dataset: xr.Dataset,
    horizontal: str,
    vertical: str,
    times: Sequence[float] | None = None,
    ax: Axes | None = None,
) -> Axes:
    """As `density`, in two components of the chart in which a chain is expanded.

    Trusted as long as every quantity is.
    """
    if not reading.has(dataset, "cloud_chart"):
        raise KeyError("the result keeps no members in a chart")
    names = [str(name) for name in dataset["component"].values]
    missing = [name for name in (horizontal, vertical) if name not in names]
    if missing:
        raise KeyError(f"no component {missing[0]!r}; there are {', '.join(names)}")
    cloud = dataset["cloud_chart"].transpose("cloud_member", "component", "cloud_time").values
    kept = np.asarray(dataset["cloud_time"].values, float)
    ax = frame.new_axes(ax, height=4.2)
    clouds = [cloud[:, names.index(name)] for name in (horizontal, vertical)]
    keys = _clouds(ax, dataset, clouds, kept, [reading.trust(dataset, None)], times)
    frame.value_axis(ax, frame.printable(vertical), "")
    frame.value_axis(ax, frame.printable(horizontal), "", "x")
    ax.locator_params(axis="x", nbins=6)
    frame.legend(ax, *keys)
    return ax


def spreading_components(dataset: xr.Dataset) -> list[str]:
    """Components of the chart in which the kept members differ at the last time."""
    if not reading.has(dataset, "cloud_chart"):
        return []
    last = (
        dataset["cloud_chart"].transpose("component", "cloud_member", "cloud_time").values[..., -1]
    )
    return [
        str(name)
        for name, values in zip(dataset["component"].values, last, strict=True)
        if np.isfinite(values).any() and np.nanstd(values) > 1e-12 * np.nanmax(np.abs(values))
    ]


def _clouds(
    ax: Axes,
    dataset: xr.Dataset,
    clouds: Sequence[FloatArray],
    kept: FloatArray,
    trusts: Sequence[reading.Trust],
    times: Sequence[float] | None,
) -> tuple[list[Line2D], list[str]]:
    """Points and lines of x and y (member, time) at some times, and their keys."""
    if times is None:
        trusted = min(trust.distribution for trust in trusts)
        last = trusted if kept[0] < trusted < kept[-1] else kept[-1]
        times = np.linspace(kept[0], kept[kept <= last][-1], 5)[1:].tolist()
    handles, labels, unit = [], [], reading.time_unit(dataset)
    for row, time in enumerate(times):
        index, hand = int(np.argmin(np.abs(kept - time))), line_stroke(row)
        x, y = (cloud[:, index] for cloud in clouds)
        good = np.isfinite(x) & np.isfinite(y)
        x, y = x[good], y[good]
        ax.plot(
            x[:POINTS],
            y[:POINTS],
            ls="",
            marker=hand.marker,
            ms=3.2,
            mew=0,
            color=hand.colour,
            alpha=0.85,
        )
        _contour(ax, x, y, hand.colour, hand.dash)
        mark = max(trust.mark(float(kept[index])) for trust in trusts)
        handles.append(Line2D([], [], color=hand.colour, ls=hand.dash, marker=hand.marker, ms=4))
        labels.append(amount(float(kept[index]), unit, 4) + mark)
    return handles, labels


def ensemble(dataset: xr.Dataset) -> tuple[FloatArray, FloatArray] | None:
    """The largest ensemble that the result keeps (member, quantity, time), and its times."""
    if "cloud_quantity" in dataset:
        values = (
            dataset["cloud_quantity"].transpose("cloud_member", "quantity", "cloud_time").values
        )
        return np.asarray(values, float), np.asarray(dataset["cloud_time"].values, float)
    if "panel_contribution" in dataset:
        whole = dataset["panel_contribution"].sum("panel_term", skipna=False)
        values = whole.transpose("panel_member", "quantity", "panel_time").values
        return np.asarray(values, float), np.asarray(dataset["panel_time"].values, float)
    if "member_quantity" in dataset:
        values = dataset["member_quantity"].transpose("member", "quantity", "time").values
        return np.asarray(values, float), reading.times(dataset)
    return None


def _contour(ax: Axes, x: FloatArray, y: FloatArray, colour: str, dash: object) -> None:
    """The line of equal density that holds 90 % of the members."""
    from scipy.stats import gaussian_kde

    if len(x) < ENOUGH:
        return
    cloud = np.stack([x, y])
    middle, spread = cloud.mean(axis=1, keepdims=True), cloud.std(axis=1, keepdims=True)
    if not (spread > 1e-9 * np.abs(middle)).all() or not (spread > 0).all():
        return
    scaled = (cloud - middle) / spread
    if np.linalg.svd(scaled, compute_uv=False)[-1] < 1e-3 * len(x) ** 0.5:
        return  # on a line: no density in the plane
    estimate = gaussian_kde(scaled)
    level = float(np.quantile(estimate(scaled), 1.0 - INSIDE))
    reach = [np.linspace(row.min() - 0.5, row.max() + 0.5, 60) for row in scaled]
    mesh = np.meshgrid(*reach)
    grid = estimate(np.stack([side.ravel() for side in mesh])).reshape(mesh[0].shape)
    ax.contour(
        mesh[0] * spread[0] + middle[0],
        mesh[1] * spread[1] + middle[1],
        grid,
        levels=[level],
        colors=[colour],
        linestyles=[dash],
        linewidths=1.4,
    )
