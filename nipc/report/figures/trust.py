"""How far to trust it: errors at held-out members, and these members themselves."""

from __future__ import annotations

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.figures.spreading import log_labels
from nipc.report.style import LIGHT, drawn, line_stroke

SHOWN = 3


@drawn
def check_error(dataset: xr.Dataset, ax: Axes | None = None) -> Axes:
    """Error of held-out paths over the spread, its tolerance, and where each quantity passes it."""
    ax = frame.new_axes(ax)
    times = reading.times(dataset)
    ax.set_yscale("log")
    handles, labels, seen = [], [], []
    for index, quantity in enumerate(reading.quantities(dataset)):
        error = reading.series(dataset, "check_error", quantity)
        if error is None or not (error > 0).any():
            continue
        hand = line_stroke(index)
        positive = np.where(error > 0, error, np.nan)
        ax.plot(times, positive, color=hand.colour, ls=hand.dash, lw=1.6)
        horizon = reading.trust(dataset, quantity).paths
        if np.isfinite(horizon) and horizon < times[-1]:
            at = float(np.interp(horizon, times, np.nan_to_num(positive, nan=np.nanmin(positive))))
            ax.plot(horizon, at, marker=hand.marker, color=hand.colour, ms=8, mec=LIGHT["paper"])
        handles.append(
            Line2D([], [], color=hand.colour, ls=hand.dash, lw=1.6, marker=hand.marker, ms=5)
        )
        labels.append(frame.printable(quantity))
        seen.append(positive)
    if not handles:
        raise KeyError("the result has no check against direct runs")
    tolerance = float(dataset.attrs.get("tolerance", np.nan))
    if np.isfinite(tolerance) and tolerance > 0:
        ax.axhline(tolerance, color=LIGHT["edge"], lw=1.3, ls=(0, (7, 2, 1.5, 2)))
        handles.append(Line2D([], [], color=LIGHT["edge"], lw=1.3, ls=(0, (7, 2, 1.5, 2))))
        labels.append("tolerance")
    together = np.concatenate(seen)
    top = float(np.nanmax(np.append(together, tolerance)))
    bottom = max(float(np.nanmin(np.append(together, tolerance))), 1e-7 * top)
    ax.set_ylim(0.6 * bottom, 2.0 * top)
    frame.time_axis(ax, dataset)
    log_labels(ax, "y")
    ax.set_ylabel("error of held-out paths\nover the spread")
    frame.legend(ax, handles, labels)
    return ax


@drawn
def direct_against_expansion(dataset: xr.Dataset, quantity: str, ax: Axes | None = None) -> Axes:
    """Held-out members: direct runs of the propagator, and the expansion at the same germ."""
    ax = frame.new_axes(ax)
    times = reading.times(dataset)
    direct = reading.series(dataset, "direct_quantity", quantity)
    expansion = reading.series(dataset, "expansion_quantity", quantity)
    if direct is None or expansion is None:
        raise KeyError(f"the result has no direct runs of {quantity!r}")
    mean = reading.series(dataset, "mean", quantity)
    middle = mean if mean is not None else np.zeros_like(times)
    step = max(len(times) // 24, 1)
    whole = np.isfinite(direct).sum(axis=1)
    shown = np.sort(np.argsort(-whole, kind="stable")[:SHOWN])
    direct, expansion = direct[shown], expansion[shown]
    stopped = False
    for row in range(len(direct)):
        hand = line_stroke(row)
        known = np.flatnonzero(np.isfinite(direct[row]))
        if known.size and known[-1] < len(times) - 1 and np.isfinite(expansion[row, -1]):
            last, stopped = known[-1], True
            end = direct[row, last] - middle[last]
            ax.plot(times[last], end, marker="x", ms=7, mew=1.6, color=LIGHT["edge"], zorder=4)
        ax.plot(times, direct[row] - middle, color=hand.colour, lw=1.2)
        offset = (row * step) // max(SHOWN, 1)
        ax.plot(
            times[offset::step],
            (expansion[row] - middle)[offset::step],
            ls="",
            ms=4.5,
            marker=hand.marker,
            mfc=LIGHT["paper"],
            mec=hand.colour,
            mew=1.0,
        )
    frame.time_axis(ax, dataset)
    paths = np.concatenate([direct, expansion]) - middle
    low, high = np.fmin.reduce(paths, axis=0), np.fmax.reduce(paths, axis=0)
    cut = frame.set_view(ax, dataset, quantity, low, high)
    frame.say_cut(ax, cut)
    less = " − mean" if mean is not None else ""
    frame.value_axis(ax, frame.printable(quantity) + less, reading.unit(dataset, quantity))
    marked = frame.mark_trust(ax, dataset, quantity)
    keys = [
        Line2D([], [], color=LIGHT["ink"], lw=1.2),
        Line2D([], [], ls="", marker="o", mfc=LIGHT["paper"], mec=LIGHT["ink"], ms=5),
    ]
    labels = ["direct run", "expansion, same germ"]
    if stopped:
        keys.append(Line2D([], [], ls="", marker="x", ms=6, mew=1.6, color=LIGHT["edge"]))
        labels.append("direct run ends")
    frame.legend(ax, keys, labels, raised=marked)
    return ax
