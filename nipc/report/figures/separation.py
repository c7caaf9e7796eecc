"""How fast neighbouring motions move apart: finite-time Lyapunov exponents over time."""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.style import LIGHT, drawn


@drawn
def lyapunov_exponents(dataset: xr.Dataset, ax: Axes | None = None) -> Axes:
    """Median, middle half and 95 % of the members' largest exponents up to each time.

    A dotted line is ln(10) over the time: on it neighbours are ten times farther apart. What does
    not separate exponentially falls with it; chaos levels off above.
    """
    if not reading.has(dataset, "lyapunov_exponent"):
        raise KeyError("the result has no Lyapunov exponents")
    found = dataset["lyapunov_exponent"].transpose("level", "time")
    levels = np.asarray(dataset["level"].values, float)
    values = {float(level): row for level, row in zip(levels, found.values, strict=True)}
    times = reading.times(dataset)
    ax = frame.new_axes(ax)
    handles, labels = [], []
    for low, high, alpha, words in (
        (0.025, 0.975, 0.35, "95 % of the members"),
        (0.25, 0.75, 0.8, "half of them"),
    ):
        if low in values and high in values:
            look: dict[str, Any] = {"facecolor": LIGHT["band"], "alpha": alpha, "lw": 0}
            ax.fill_between(times, values[low], values[high], **look)
            handles.append(frame.patch_key("band", alpha=alpha, lw=0))
            labels.append(words)
    middle = values[min(values, key=lambda level: abs(level - 0.5))]
    ax.plot(times, middle, color=LIGHT["main"], lw=1.8)
    begin = float(dataset["lyapunov_begin"]) if "lyapunov_begin" in dataset else float(times[0])
    later = times > begin
    tenfold = np.full(times.size, np.nan)
    tenfold[later] = np.log(10.0) / (times[later] - begin)
    ax.plot(times, tenfold, color=LIGHT["soft"], lw=1.1, ls=":")
    handles = [Line2D([], [], color=LIGHT["main"], lw=1.8), *handles]
    handles.append(Line2D([], [], color=LIGHT["soft"], lw=1.1, ls=":"))
    labels = ["median", *labels, "ten times farther apart"]
    held = np.concatenate([row[np.isfinite(row)] for row in values.values()])
    settled = np.concatenate([row[times.size // 4 :] for row in values.values()])
    settled = settled[np.isfinite(settled)] if np.isfinite(settled).any() else held
    top = max(1.5 * float(settled.max()), 1.6 * float(tenfold[-1]), 0.0)
    low = min(float(settled.min()), 0.0)
    ax.set_ylim(low - 0.05 * (top - low), top if top > low else low + 1.0)
    frame.time_axis(ax, dataset)
    unit = reading.time_unit(dataset)
    frame.value_axis(ax, "largest exponent up to then", f"1/{unit}" if unit else "")
    marked = frame.mark_trust(ax, dataset, None)
    frame.legend(ax, handles, labels, raised=marked)
    return ax
