"""Stays or leaves: inside and survival probability over time, and when members leave."""

from __future__ import annotations

import textwrap

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.style import LIGHT, drawn

CURVES = (
    ("inside_probability", "inside at t", "main", "solid"),
    ("survival_probability", "inside at all times up to t", "edge", (0, (5, 1.5))),
)


@drawn
def confinement(dataset: xr.Dataset, quantity: str, ax: Axes | None = None) -> Axes:
    """P(in the box at t) and P(in the box at all times up to t), with their 95 % intervals."""
    ax = frame.new_axes(ax)
    times = reading.times(dataset)
    handles, labels, lowest = [], [], 1.0
    for name, label, ink, dash in CURVES:
        curve = reading.series(dataset, name, quantity)
        if curve is None:
            continue
        low = reading.series(dataset, name + "_low", quantity)
        high = reading.series(dataset, name + "_high", quantity)
        if low is not None and high is not None:
            ax.fill_between(times, low, high, color=LIGHT[ink], alpha=0.15, lw=0)
            ax.plot(times, np.stack([low, high], axis=1), color=LIGHT[ink], lw=0.5, alpha=0.7)
            lowest = min(lowest, float(np.nanmin(low)))
        lowest = min(lowest, float(np.nanmin(curve)))
        ax.plot(times, curve, color=LIGHT[ink], lw=1.7, ls=dash)
        handles.append(Line2D([], [], color=LIGHT[ink], lw=1.7, ls=dash))
        labels.append(label)
    if not handles:
        raise KeyError(f"the result has no probability for {quantity!r}: it has no box")
    ax.set_ylabel(textwrap.fill(f"P({frame.printable(quantity)} in its box)", 30))
    gap = max(1.0 - lowest, 1e-3)
    ax.set_ylim(max(1.0 - 1.12 * gap, -0.02) if gap < 0.7 else -0.02, 1.0 + 0.06 * min(gap, 0.4))
    frame.time_axis(ax, dataset)
    marked = frame.mark_trust(ax, dataset, quantity)
    frame.legend(ax, handles, labels, raised=marked)
    return ax
