"""Stays or leaves: inside and survival probability over time, and when members leave."""

from __future__ import annotations

import textwrap
from collections.abc import Callable

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from nipc.arrays import FloatArray
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
    keys = _curves(ax, dataset, lambda name: reading.series(dataset, name, quantity))
    if not keys:
        raise KeyError(f"the result has no probability for {quantity!r}: it has no box")
    ax.set_ylabel(textwrap.fill(f"P({frame.printable(quantity)} in its box)", 30))
    return _finished(ax, dataset, quantity, keys)


@drawn
def joint_confinement(dataset: xr.Dataset, joint: str, ax: Axes | None = None) -> Axes:
    """The same for a box of several quantities; marked past the earliest of all trust horizons."""
    if joint not in reading.joints(dataset):
        raise KeyError(f"the result has no joint box {joint!r}")
    ax = frame.new_axes(ax)
    keys = _curves(ax, dataset, lambda name: reading.joint_series(dataset, f"joint_{name}", joint))
    if not keys:
        raise KeyError(f"the result has no probability for the joint box {joint!r}")
    ax.set_ylabel(textwrap.fill(f"P(in all of {frame.printable(joint)})", 30))
    return _finished(ax, dataset, None, keys)


def _curves(
    ax: Axes, dataset: xr.Dataset, series: Callable[[str], FloatArray | None]
) -> list[tuple[Line2D, str]]:
    """Both probabilities with their intervals, the view, and the keys of the legend."""
    times, keys, lowest = reading.times(dataset), [], 1.0
    for name, label, ink, dash in CURVES:
        curve, low, high = (series(name + side) for side in ("", "_low", "_high"))
        if curve is None:
            continue
        if low is not None and high is not None:
            ax.fill_between(times, low, high, color=LIGHT[ink], alpha=0.15, lw=0)
            ax.plot(times, np.stack([low, high], axis=1), color=LIGHT[ink], lw=0.5, alpha=0.7)
            lowest = min(lowest, float(np.nanmin(low)))
        lowest = min(lowest, float(np.nanmin(curve)))
        ax.plot(times, curve, color=LIGHT[ink], lw=1.7, ls=dash)
        keys.append((Line2D([], [], color=LIGHT[ink], lw=1.7, ls=dash), label))
    gap = max(1.0 - lowest, 1e-3)
    ax.set_ylim(max(1.0 - 1.12 * gap, -0.02) if gap < 0.7 else -0.02, 1.0 + 0.06 * min(gap, 0.4))
    return keys


def _finished(
    ax: Axes, dataset: xr.Dataset, quantity: str | None, keys: list[tuple[Line2D, str]]
) -> Axes:
    frame.time_axis(ax, dataset)
    marked = frame.mark_trust(ax, dataset, quantity)
    frame.legend(ax, [key for key, _ in keys], [label for _, label in keys], raised=marked)
    return ax
