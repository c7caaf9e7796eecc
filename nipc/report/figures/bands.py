"""Where a quantity goes: median, 50 % and 95 % bands, some members, and its box."""

from __future__ import annotations

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.numbers import number
from nipc.report.style import LIGHT, drawn

SHOWN = 6


@drawn
def bands(dataset: xr.Dataset, quantity: str, ax: Axes | None = None) -> Axes:
    """The distribution of a quantity over time, with its box and trust horizon.

    Quantiles where the result has them, otherwise mean ± 1.96 standard deviations. The view keeps
    to what happens within the trust horizon when the rest would dwarf it, and says so.
    """
    ax = frame.new_axes(ax)
    times = reading.times(dataset)
    outer = (reading.quantile(dataset, 0.025, quantity), reading.quantile(dataset, 0.975, quantity))
    inner = (reading.quantile(dataset, 0.25, quantity), reading.quantile(dataset, 0.75, quantity))
    middle = reading.quantile(dataset, 0.5, quantity)
    names = ("median", "50 %", "95 %")
    if middle is None or outer[0] is None or outer[1] is None:
        middle = reading.series(dataset, "mean", quantity)
        spread = reading.series(dataset, "std", quantity)
        if middle is None:
            raise KeyError(f"the result has neither quantiles nor a mean of {quantity!r}")
        names = ("mean", "", "mean ± 1.96 std")
        outer = (None, None) if spread is None else (middle - 1.96 * spread, middle + 1.96 * spread)
        inner = (None, None)
    handles, labels = [], []
    for pair, name, alpha in ((outer, names[2], 0.5), (inner, names[1], 0.95)):
        if pair[0] is not None and pair[1] is not None:
            ax.fill_between(times, pair[0], pair[1], color=LIGHT["band"], alpha=alpha, lw=0)
            handles.append(frame.patch_key("band", alpha=alpha))
            labels.append(name)
    members = reading.series(dataset, "member_quantity", quantity)
    if members is not None:
        members = members[:SHOWN]
        ax.plot(times, members.T, color=LIGHT["soft"], lw=0.5, alpha=0.8)
        handles.append(Line2D([], [], color=LIGHT["soft"], lw=0.7))
        labels.append("members")
    handles.insert(0, ax.plot(times, middle, color=LIGHT["main"], lw=1.7)[0])
    labels.insert(0, names[0])
    low, high = (x if x is not None else middle for x in outer)
    if members is not None:
        low, high = np.fmin(low, members.min(axis=0)), np.fmax(high, members.max(axis=0))
    box = reading.box(dataset, quantity)
    cut = frame.set_view(ax, dataset, quantity, low, high, box.edges if box is not None else [])
    if box is not None:
        handles.append(_draw_box(ax, box))
        labels.append(_box_label(ax, box))
    frame.time_axis(ax, dataset)
    frame.say_cut(ax, cut)
    frame.value_axis(ax, frame.printable(quantity), reading.unit(dataset, quantity))
    marked = frame.mark_trust(ax, dataset, quantity)
    frame.legend(ax, handles, labels, raised=marked)
    return ax


def _draw_box(ax: Axes, box: reading.Box) -> Line2D:
    bottom, top = ax.get_ylim()
    for edge in box.edges:
        if bottom <= edge <= top:
            ax.axhline(edge, color=LIGHT["edge"], lw=1.4, ls=(0, (7, 2, 1.5, 2)))
    return Line2D([], [], color=LIGHT["edge"], lw=1.4, ls=(0, (7, 2, 1.5, 2)))


def _box_label(ax: Axes, box: reading.Box) -> str:
    bottom, top = ax.get_ylim()
    off = [number(edge, 7) for edge in box.edges if not bottom <= edge <= top]
    return "box" if not off else f"box ({' and '.join(off)} off the scale)"
