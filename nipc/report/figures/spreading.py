"""How the spread grows: spread rate, the part beyond degree one, variance and its law."""

from __future__ import annotations

import textwrap
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

from nipc.arrays import FloatArray
from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.numbers import number, power_of_ten, squared
from nipc.report.style import LIGHT, drawn, line_stroke


def _curves(ax: Axes, dataset: xr.Dataset, name: str) -> bool:
    """One line for each quantity that has this variable, solid up to its trust horizon."""
    times = reading.times(dataset)
    handles, labels = [], []
    for index, quantity in enumerate(reading.quantities(dataset)):
        curve = reading.series(dataset, name, quantity)
        if curve is None:
            continue
        hand, trust = line_stroke(index), reading.trust(dataset, quantity)
        look = {"color": hand.colour, "ls": hand.dash}
        trusted = times <= np.nan_to_num(trust.distribution, nan=-np.inf) + 1e-12 * abs(times[-1])
        ax.plot(times, curve, lw=0.8, alpha=0.55, **look)
        ax.plot(times, np.where(trusted, curve, np.nan), lw=1.7, **look)
        if not trusted.all() and trusted.any():
            stop = int(np.flatnonzero(trusted)[-1])
            ax.plot(times[stop], curve[stop], marker=hand.marker, color=hand.colour, ms=6)
        handles.append(Line2D([], [], lw=1.7, marker=hand.marker, ms=5, **look))
        labels.append(frame.printable(quantity))
    frame.time_axis(ax, dataset)
    frame.legend(ax, handles, labels)
    return bool(handles)


@drawn
def spread_rate(dataset: xr.Dataset, ax: Axes | None = None) -> Axes:
    """Growth rate of the non-constant part of each quantity; thin past its trust horizon."""
    ax = frame.new_axes(ax)
    if not _curves(ax, dataset, "spread_rate"):
        raise KeyError("the result has no spread rates")
    ax.axhline(0.0, color=LIGHT["soft"], lw=0.8, zorder=1)
    unit = reading.time_unit(dataset)
    values = dataset["spread_rate"].values
    finite = values[np.isfinite(values)]
    top = float(np.quantile(finite, 0.97))
    if finite.max() > 3 * max(top, 1e-300) and top > 0:
        ax.set_ylim(min(float(finite.min()), 0.0) - 0.05 * top, 1.5 * top)
    frame.value_axis(ax, "spread rate", f"1/{unit}" if unit else "")
    return ax


@drawn
def nonlinear_share(dataset: xr.Dataset, ax: Axes | None = None) -> Axes:
    """Share of each quantity's variance that is beyond degree one in the germ."""
    ax = frame.new_axes(ax)
    if not _curves(ax, dataset, "nonlinear_share"):
        raise KeyError("the result has no nonlinear shares")
    top = float(np.nanmax(dataset["nonlinear_share"].values))
    ax.set_ylim(0.0, max(1.1 * top, 0.01))  # below a hundredth it does not matter how little it is
    ax.set_ylabel("share of the variance\nbeyond degree one")
    return ax


@drawn
def diffusion(dataset: xr.Dataset, quantity: str, ax: Axes | None = None) -> Axes:
    """Variance against time since the start, log axes, with the fitted law A + 2 D t^α."""
    ax = frame.new_axes(ax)
    times = reading.times(dataset)
    spread = reading.series(dataset, "std", quantity)
    if spread is None:
        raise KeyError(f"the result has no standard deviation of {quantity!r}")
    elapsed, variance = times - times[0], spread**2
    shown = (elapsed > 0) & (variance > 0) & np.isfinite(variance)
    if shown.sum() < 2:
        raise KeyError(f"the variance of {quantity!r} is zero")
    ax.set_xscale("log")
    ax.set_yscale("log")
    slow = _slow_variance(dataset, quantity, variance)
    look: dict[str, Any] = {"color": LIGHT["main"], "lw": 1.7 if slow is None else 0.9}
    ax.plot(elapsed[shown], variance[shown], **look)
    handles, labels = [Line2D([], [], **look)], ["variance"]
    span = float(variance[shown].min()), float(variance[shown].max())
    if slow is not None:
        ax.plot(elapsed[shown], slow[shown], color=LIGHT["ink"], lw=1.9)
        handles.append(Line2D([], [], color=LIGHT["ink"], lw=1.9))
        labels.append("averaged over its period")
        span = min(span[0], max(float(np.nanmin(slow[shown])), 1e-6 * span[1])), span[1]
    law, words = _law(dataset, quantity, elapsed[shown])
    if law is not None:
        span = max(min(span[0], max(float(law.min()), 0.1 * law[-1])), 1e-6 * span[1]), span[1]
        law = np.where((law > 0.3 * span[0]) & (law < 3 * span[1]), law, np.nan)
        dash: dict[str, Any] = {"color": LIGHT["edge"], "lw": 1.5, "ls": (0, (6, 2))}
        ax.plot(elapsed[shown], law, **dash)
        handles.append(Line2D([], [], **dash))
        labels.append(words)
    ax.set_xlim(float(elapsed[shown][0]), float(elapsed[-1]))
    ax.set_ylim(0.6 * span[0], 1.7 * span[1])
    log_labels(ax, "xy")
    unit = reading.unit(dataset, quantity)
    ax.set_xlabel(frame.with_unit("time since the start", reading.time_unit(dataset)))
    label = frame.with_unit(f"variance of {frame.printable(quantity)}", squared(unit))
    ax.set_ylabel(textwrap.fill(label, 30))
    marked = frame.mark_trust(ax, _from_start(dataset, times[0]), quantity)
    frame.legend(ax, handles, labels, raised=marked)
    return ax


def _slow_variance(dataset: xr.Dataset, quantity: str, variance: FloatArray) -> FloatArray | None:
    """The variance of the quantity averaged over its period; None where that changes nothing."""
    std = reading.series(dataset, "slow_std", quantity)
    if std is None or not (std[np.isfinite(std)] > 0).any():
        return None
    slow = np.where(std > 0, std**2, np.nan)
    return None if np.nanmax(np.abs(slow - variance) / np.nanmax(variance)) < 0.01 else slow


def _law(dataset: xr.Dataset, quantity: str, elapsed: FloatArray) -> tuple[FloatArray | None, str]:
    """The fitted law at times since the start, and its name; a straight line where that is it."""
    growth = reading.scalar(dataset, "diffusion_coefficient", quantity)
    exponent = reading.scalar(dataset, "diffusion_exponent", quantity)
    if not (np.isfinite(growth) and np.isfinite(exponent) and growth > 0):
        return None, ""
    straight = reading.text(dataset, "spreading_verdict", quantity) == "diffusive"
    offset = reading.scalar(dataset, "diffusion_offset", quantity)
    law = np.nan_to_num(offset) + 2 * growth * elapsed ** (1.0 if straight else exponent)
    name = "2 D t" + ("" if straight else "^α")
    name = "A + " + name if offset > 0 else name
    return law, f"{name}, α = {_alpha(dataset, quantity)}"


def _from_start(dataset: xr.Dataset, start: float) -> xr.Dataset:
    """The same result with its clock at zero where the study starts."""
    if start == 0.0:
        return dataset
    names = [n for n in ("trust_horizon", "trust_horizon_distribution") if n in dataset]
    moved = dataset.assign({name: dataset[name] - start for name in names})
    return moved.assign_coords(time=moved["time"] - start)


def _alpha(dataset: xr.Dataset, quantity: str) -> str:
    low = reading.scalar(dataset, "diffusion_exponent_low", quantity)
    high = reading.scalar(dataset, "diffusion_exponent_high", quantity)
    value = number(reading.scalar(dataset, "diffusion_exponent", quantity), 3)
    if not np.isfinite(low + high):
        return value
    return f"{value} ({number(low, 3)} to {number(high, 3)})"


def log_labels(ax: Axes, which: str) -> None:
    """Ticks of log axes as text, without the typesetting that figures with any name cannot use."""

    def label(value: float, _: int) -> str:
        exponent = round(float(np.log10(value)))
        whole = abs(np.log10(value) - exponent) < 1e-6
        return power_of_ten(exponent) if whole else number(value, 2)

    def simple(value: float, _: int) -> str:
        return number(value, 2)

    for name in which:
        axis, limits = (ax.xaxis, ax.get_xlim()) if name == "x" else (ax.yaxis, ax.get_ylim())
        decades = np.log10(limits[1] / limits[0])
        subs: tuple[float, ...] = (1.0,) if decades > 1.5 else (1.0, 2.0, 5.0)
        axis.set_major_locator(LogLocator(subs=subs, numticks=7))
        plain = limits[0] > 8e-4 and limits[1] < 2e4
        axis.set_major_formatter(FuncFormatter(simple if plain else label))
        axis.set_minor_formatter(NullFormatter())
