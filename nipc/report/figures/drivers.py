"""What drives the spread: shares over time, and their ranking at the end."""

from __future__ import annotations

import textwrap

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from nipc.arrays import FloatArray
from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.numbers import percent
from nipc.report.style import LIGHT, drawn, stroke

LARGEST = 7
WIDEST = 1.0  # of a share
"""Sources shown by themselves in the stack; the smaller ones are put together."""


@drawn
def driver_shares(dataset: xr.Dataset, quantity: str, ax: Axes | None = None) -> Axes:
    """First-order Sobol shares over time, stacked; what is left is shared by several sources."""
    ax = frame.new_axes(ax)
    times, names = reading.times(dataset), reading.sources(dataset)
    shares = reading.shares(dataset, "driver_first", quantity)
    if shares is None:
        raise KeyError(f"the result has no driver shares for {quantity!r}")
    unknown = reading.unknown_shares(dataset, quantity)
    if unknown.all():
        raise KeyError(f"no share of {quantity!r} is known to be of use")
    shares = np.where(unknown, np.nan, np.clip(shares, 0.0, 1.0))
    weight = np.nan_to_num(shares).max(axis=1)
    kept = sorted(np.argsort(-weight, kind="stable")[:LARGEST].tolist())
    rows: list[tuple[str, FloatArray, Patch]] = []
    for index in kept:
        hand = stroke(index)
        key = Patch(facecolor=hand.colour, hatch=hand.hatch, edgecolor=LIGHT["paper"], lw=0)
        rows.append((frame.printable(names[index]), shares[index], key))
    others = [index for index in range(len(names)) if index not in kept]
    if others:
        label = f"{len(others)} smaller ones"
        rows.append((label, shares[others].sum(axis=0), Patch(facecolor=LIGHT["rule"], lw=0)))
    bottom = np.zeros_like(times)
    for _, share, key in rows:
        top = bottom + share
        ax.fill_between(
            times,
            bottom,
            top,
            facecolor=key.get_facecolor(),
            hatch=key.get_hatch(),
            edgecolor=LIGHT["paper"],
            lw=0.0,
            zorder=2,
        )
        bottom = top
    handles, labels = [row[2] for row in rows], [row[0] for row in rows]
    if np.nanmax(1.0 - bottom) > 0.005:
        ax.fill_between(
            times, bottom, np.fmax(1.0, bottom), facecolor=LIGHT["rest"], lw=0, zorder=2
        )
        handles.append(Patch(facecolor=LIGHT["rest"], lw=0))
        labels.append("several together")
    ax.set_ylim(0.0, max(1.0, float(np.nanmax(bottom))))
    ax.set_ylabel(textwrap.fill(f"share of the variance of {frame.printable(quantity)}", 30))
    frame.time_axis(ax, dataset)
    if unknown.any():
        ax.set_xlabel(f"{ax.get_xlabel()}\nblank where the shares are not known")
    marked = frame.mark_trust(ax, dataset, quantity)
    frame.legend(ax, handles, labels, raised=marked)
    return ax


@drawn
def driver_ranking(dataset: xr.Dataset, quantity: str, ax: Axes | None = None) -> Axes:
    """Total (open) and first-order (filled) shares at the end, largest first, 95 % intervals."""
    names = reading.sources(dataset)
    total = reading.shares(dataset, "driver_total", quantity)
    first = reading.shares(dataset, "driver_first", quantity)
    leading = total if total is not None else first
    if leading is None:
        raise KeyError(f"the result has no driver shares for {quantity!r}")
    ax = frame.new_axes(ax, height=max(1.5 + 0.34 * len(names), 2.3))
    at_end = np.nan_to_num(leading[:, -1])
    order = np.argsort(-at_end, kind="stable")
    for row, index in enumerate(order):
        hand = stroke(int(index))
        if first is not None:
            ax.barh(
                row,
                first[index, -1],
                height=0.62,
                color=hand.colour,
                hatch=hand.hatch,
                edgecolor=LIGHT["paper"],
                lw=0,
                zorder=2,
            )
        ax.barh(
            row,
            min(leading[index, -1], WIDEST),
            height=0.62,
            fill=False,
            edgecolor=LIGHT["ink"],
            lw=0.9,
            zorder=3,
        )
        shown = float(np.clip(leading[index, -1], 0.0, WIDEST))
        end = _interval(
            ax,
            dataset,
            quantity,
            "driver_total" if total is not None else "driver_first",
            int(index),
            row,
        )
        ax.annotate(
            "not known" if end[1] - end[0] > reading.WIDE else percent(shown),
            (max(end[1], shown), row),
            xytext=(6, 0),
            textcoords="offset points",
            va="center",
        )
    ax.set_yticks(range(len(order)), [frame.printable(names[i]) for i in order])
    ax.set_ylim(len(order) - 0.4, -0.6)
    ax.set_xlim(0.0, 1.25)
    ax.set_xticks(np.arange(0.0, 1.01, 0.2))
    ax.grid(False, axis="y")
    trust = reading.trust(dataset, quantity)
    late = {
        "": "",
        "†": "\n† past the trust horizon of its paths",
        "‡": "\n‡ past its trust horizon" if trust.checked else "\n‡ not checked",
    }
    mark = trust.mark(trust.end)
    words = f"share of the variance of {frame.printable(quantity)} at the end{mark}"
    ax.set_xlabel(textwrap.fill(words, 46) + late[mark])
    keys = [
        Patch(fill=False, edgecolor=LIGHT["ink"], lw=0.9),
        Patch(facecolor=LIGHT["soft"]),
        Line2D([], [], color=LIGHT["edge"], lw=1.5),
    ]
    names_of_keys = ["total", "by itself", "95 % interval of the total"]
    if total is None:
        keys, names_of_keys = keys[1:], ["by itself", "95 % interval"]
    frame.legend(ax, keys, names_of_keys)
    return ax


def _interval(
    ax: Axes, dataset: xr.Dataset, quantity: str, name: str, index: int, row: int
) -> tuple[float, float]:
    """Draw a share's interval; its ends."""
    low = reading.shares(dataset, name + "_low", quantity)
    high = reading.shares(dataset, name + "_high", quantity)
    if low is None or high is None or not np.isfinite(low[index, -1] + high[index, -1]):
        return 0.0, 0.0
    # an estimate of a share may pass one, a share may not
    ends = np.clip([low[index, -1], high[index, -1]], 0.0, WIDEST)
    ax.plot(ends, [row, row], color=LIGHT["edge"], lw=1.5, zorder=4, marker="|", ms=7, mew=1.5)
    return float(ends[0]), float(ends[1])
