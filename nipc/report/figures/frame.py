"""What every figure shares: its axes, time axis, legend row and the mark of the trust horizon."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Sequence
from typing import Any, Literal

import numpy as np
import xarray as xr
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine
from matplotlib.patches import Patch
from matplotlib.ticker import FuncFormatter, ScalarFormatter
from matplotlib.transforms import blended_transform_factory

from nipc.arrays import FloatArray
from nipc.report import reading
from nipc.report.numbers import amount, number, power_of_ten
from nipc.report.style import HEIGHT, LIGHT, WIDTH

_CHARACTER = 0.0148  # width of a legend's character over that of the axes, generous


def new_axes(ax: Axes | None, height: float = HEIGHT) -> Axes:
    """The axes given, or those of a new figure."""
    return ax if ax is not None else new_figure(1, height)[0]


def new_figure(rows: int, height: float, ratios: Sequence[float] | None = None) -> list[Axes]:
    """Axes one above the other that share their horizontal axis."""
    figure = Figure(figsize=(WIDTH, height), layout=ConstrainedLayoutEngine(w_pad=0.1, h_pad=0.06))
    FigureCanvasAgg(figure)
    grid = figure.subplots(rows, 1, sharex=True, squeeze=False, height_ratios=ratios)
    return list(grid[:, 0])


def printable(name: str) -> str:
    """A name as a label: on one line, not too long, and not hidden by a leading underscore."""
    shown = " ".join(str(name).split()) or "(no name)"
    if len(shown) > 34:
        shown = shown[:32] + "…"
    return "\u200a" + shown if shown.startswith("_") else shown


def with_unit(label: str, unit: str) -> str:
    """An axis label: what, and in which unit."""
    return f"{label} ({unit})" if unit and unit != "1" else label


def time_axis(ax: Axes, dataset: xr.Dataset) -> None:
    """Label and limits of a time axis."""
    times = reading.times(dataset)
    if times[-1] > times[0]:
        ax.set_xlim(float(times[0]), float(times[-1]))
    value_axis(ax, "time", reading.time_unit(dataset), "x")


def set_view(
    ax: Axes,
    dataset: xr.Dataset,
    quantity: str,
    low: FloatArray,
    high: FloatArray,
    edges: Sequence[float] = (),
) -> tuple[float, float] | None:
    """Vertical limits from curves low ... high (time,) and the edges of a box that lie near.

    What happens within the trust horizon is not dwarfed by what comes later: then the view is cut,
    and the range that was cut is returned.
    """
    if not (np.isfinite(low).any() and np.isfinite(high).any()):
        return None
    reach = bottom, top = float(np.nanmin(low)), float(np.nanmax(high))
    if not (np.isfinite(bottom) and np.isfinite(top)):
        return None
    trusted = reading.times(dataset) <= np.nan_to_num(
        reading.trust(dataset, quantity).distribution, nan=-np.inf
    )
    cut = False
    if trusted.any() and not trusted.all():
        kept = float(np.nanmin(low[trusted])), float(np.nanmax(high[trusted]))
        span = kept[1] - kept[0]
        if span > 0 and top - bottom > 12 * span:
            bottom, top, cut = kept[0] - 2 * span, kept[1] + 2 * span, True
    span = top - bottom
    near = [edge for edge in edges if bottom - 1.5 * span <= edge <= top + 1.5 * span]
    bottom, top = min([bottom, *near]), max([top, *near])
    margin = 0.06 * (top - bottom) or 0.5 * (abs(top) * 1e-3 or 1.0)
    ax.set_ylim(bottom - margin, top + margin)
    return reach if cut else None


def say_cut(ax: Axes, cut: tuple[float, float] | None) -> None:
    """Below the time axis: how far what was cut reaches."""
    if cut is not None:
        words = f"view cut: the motion reaches {number(cut[0], 3)} to {number(cut[1], 3)}"
        ax.set_xlabel(f"{ax.get_xlabel()}\n{words}")


def value_axis(ax: Axes, name: str, unit: str, side: Literal["x", "y"] = "y") -> None:
    """Label and ticks of an axis of values: an offset or a power of ten goes to the label.

    "energy + 4.7268 (10⁻⁶ km²/s²)": what the ticks count is the value plus 4.7268, in 1e-6 km²/s².
    """
    axis = ax.yaxis if side == "y" else ax.xaxis
    low, high = axis.get_view_interval()
    span, middle = high - low, 0.5 * (low + high)
    offset, factor = 0.0, 1.0
    if abs(middle) > 2e4 * span > 0:
        step = 10.0 ** (math.floor(math.log10(span)) + 1)
        offset = round(middle / step) * step
    reach = max(abs(low - offset), abs(high - offset))
    if reach > 0 and not 2e-3 <= reach < 1e5:
        factor = 10.0 ** (3 * math.floor(math.log10(reach) / 3))
    label = name
    if offset:
        digits = max(int(math.log10(abs(offset)) - math.log10(span)) + 2, 3)
        label += f" {'−' if offset > 0 else '+'} {number(abs(offset), digits)}"
    if factor != 1.0:
        unit = f"{power_of_ten(round(math.log10(factor)))} {unit}".rstrip()
    axis.set_label_text(textwrap.fill(with_unit(label, unit), 30 if side == "y" else 60))
    plain = axis.get_major_formatter()
    if isinstance(plain, ScalarFormatter):  # of axes that the caller made in another style
        plain.set_useOffset(False)
    if offset or factor != 1.0:

        def tick(value: float, _: int) -> str:
            return number(round((value - offset) / span, 9) * span / factor, 4)

        axis.set_major_formatter(FuncFormatter(tick))


def legend(ax: Axes, handles: Sequence[Any], labels: Sequence[str], raised: bool = False) -> None:
    """A row of keys above the axes, where no curve can be; as many columns as fit."""
    if not handles:
        return
    # narrower axes of the caller's own hold fewer of them
    own = 0.85 * WIDTH / max(_inches_wide(ax), 1e-3)
    narrow = own if own > 1.3 else 1.0
    widths = [(len(label) + 6) * _CHARACTER * narrow for label in labels]
    columns = len(labels)
    while columns > 1 and sum(_column_widths(widths, columns)) >= 1.0:
        columns -= 1
    ax.legend(
        list(handles),
        list(labels),
        loc="lower left",
        bbox_to_anchor=(0.0, 1.1 if raised else 1.03),
        ncols=columns,
    )


def _inches_wide(ax: Axes) -> float:
    """Width of the axes as far as it is known before they are laid out."""
    return float(ax.get_position().width * ax.figure.get_figwidth())  # type: ignore[union-attr]


def _column_widths(widths: list[float], columns: int) -> list[float]:
    """As a legend fills its columns: one after the other, the first ones the longest."""
    rows, longer = divmod(len(widths), columns)
    found, at = [], 0
    for column in range(columns):
        count = rows + (column < longer)
        found.append(max(widths[at : at + count]))
        at += count
    return found


def mark_trust(ax: Axes, dataset: xr.Dataset, quantity: str | None) -> bool:
    """Shade what lies past the trust horizons and say so above the axes; whether it did.

    No quantity: the earliest of all trust horizons.
    """
    trust = reading.trust(dataset, quantity)
    start, end = ax.get_xlim()
    unit = reading.time_unit(dataset)
    if not trust.checked:
        _zone(ax, start, end, "not")
        _trust_label(ax, 0.0, "not checked against direct runs: no trust horizon")
        return True
    paths = trust.paths if np.isfinite(trust.paths) else float(reading.times(dataset)[0])
    last = float(reading.times(dataset)[-1])
    if not trust.mark(last):
        return False
    _zone(ax, paths, trust.distribution, "distribution")
    _zone(ax, trust.distribution, last, "not")
    if trust.distribution > paths:
        words = f"trust horizon: paths {amount(paths, unit, 3)}, "
        words += f"distribution {amount(trust.distribution, unit, 3)}"
    else:
        words = f"trust horizon {amount(paths, unit, 3)}"
    ax.axvline(paths, color=LIGHT["ink"], lw=0.9, zorder=3)
    fraction = ax.transAxes.inverted().transform(ax.transData.transform((paths, ax.get_ylim()[0])))
    _trust_label(ax, float(fraction[0]), words)
    return True


def _zone(ax: Axes, low: float, high: float, kind: str) -> None:
    if not high > low:
        return
    hatch = {"distribution": "/", "not": "//"}[kind]
    band = blended_transform_factory(ax.transData, ax.transAxes)
    alpha = 0.11 if kind == "distribution" else 0.22
    shape: dict[str, Any] = {"transform": band, "lw": 0.0, "zorder": 2.5}
    ax.fill_between([low, high], 0, 1, facecolor=LIGHT["doubt"], alpha=alpha, **shape)
    ax.fill_between(
        [low, high],
        0,
        1,
        facecolor="none",
        edgecolor=LIGHT["doubt"],
        alpha=0.5,
        hatch=hatch,
        **shape,
    )


def _trust_label(ax: Axes, fraction: float, words: str) -> None:
    """Above the axes, beginning or ending at the horizon, wherever it fits."""
    text = f"▾ {words}"
    width = len(text) * _CHARACTER
    side, at = "left", fraction
    if fraction + width > 1.0:
        side, at = ("right", fraction) if fraction > width else ("right", 1.0)
        text = f"{words} ▾" if fraction > width else words
    ax.text(
        at,
        1.015,
        text,
        transform=ax.transAxes,
        ha=side,
        va="bottom",
        fontsize=10,
        color=LIGHT["soft"],
    )


def patch_key(ink: str, **how: Any) -> Artist:
    """A filled key for the legend."""
    return Patch(facecolor=LIGHT[ink], **how)
