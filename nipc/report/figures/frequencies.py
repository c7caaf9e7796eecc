"""Which frequencies of the noise drive a quantity: the part of its variance from each band."""

from __future__ import annotations

import textwrap
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.patches import Patch

from nipc.arrays import FloatArray
from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.figures.spreading import log_labels
from nipc.report.numbers import amount, number
from nipc.report.style import LIGHT, drawn, stroke


@drawn
def driver_bands(dataset: xr.Dataset, quantity: str, ax: Axes | None = None) -> Axes:
    """Share of the variance from each band of frequencies of each source, stacked, first order.

    The first band begins at zero frequency and the last never ends: on the logarithmic axis both
    are drawn as wide as their neighbours.
    """
    parts = band_parts(dataset, quantity)
    if parts is None:
        raise KeyError(f"the result does not tell which frequencies drive {quantity!r}")
    ax = frame.new_axes(ax)
    edges = _drawn_edges(dataset)
    ax.set_xscale("log")
    handles, labels = [], []
    bottom = np.zeros(edges.size - 1)
    for index, name in enumerate(reading.sources(dataset)):
        if not np.isfinite(parts[index]).any():
            continue
        hand, part = stroke(index), np.nan_to_num(parts[index])
        look: dict[str, Any] = {
            "facecolor": hand.colour,
            "hatch": hand.hatch,
            "edgecolor": LIGHT["paper"],
        }
        ax.bar(
            edges[:-1], part, np.diff(edges), bottom=bottom, align="edge", lw=0.3, zorder=2, **look
        )
        bottom += part
        handles.append(Patch(lw=0, **look))
        labels.append(frame.printable(name))
    ax.set_xlim(edges[0], edges[-1])
    ax.set_ylim(0.0, 1.3 * max(float(bottom.max()), 1e-3))
    log_labels(ax, "x")
    unit = reading.time_unit(dataset)
    label = frame.with_unit("frequency of the noise", f"1/{unit}" if unit else "")
    when = amount(reading.scalar(dataset, "band_time", quantity), unit, 3)
    ax.set_xlabel(f"{label}\nto first order, at {when}")
    words = f"share of the variance of {frame.printable(quantity)}"
    ax.set_ylabel(textwrap.fill(words, 30))
    _mark_peak(ax, dataset, quantity, parts)
    frame.legend(ax, handles, labels)
    return ax


def band_parts(dataset: xr.Dataset, quantity: str) -> FloatArray | None:
    """(source, band) shares of the quantity's variance: the source's own times its share."""
    if "band_share" not in dataset or "driver_first" not in dataset:
        return None
    at = reading.position(dataset, quantity)
    own = dataset["band_share"].transpose("source", "band", "quantity").values[:, :, at]
    time = reading.scalar(dataset, "band_time", quantity)
    shares = reading.shares(dataset, "driver_first", quantity)
    if not np.isfinite(time) or shares is None or not np.isfinite(own).any():
        return None
    row = int(np.argmin(np.abs(reading.times(dataset) - time)))
    return np.asarray(own * np.clip(shares[:, row], 0.0, 1.0)[:, None])


def _drawn_edges(dataset: xr.Dataset) -> FloatArray:
    low = np.asarray(dataset["band_low"].values, float)
    edges = np.append(low, np.nan)
    edges[-1] = low[-1] * (low[-1] / low[-2] if low.size > 2 else 2.0)
    edges[0] = low[1] * (low[1] / low[2] if low.size > 2 else 0.5)
    return edges


def _mark_peak(ax: Axes, dataset: xr.Dataset, quantity: str, parts: FloatArray) -> None:
    """The resonance of the source that gives the most, where it has one."""
    source = int(np.argmax(np.nansum(parts, axis=1)))
    at = reading.position(dataset, quantity)
    values = [
        float(dataset[f"resonance_{name}"].transpose("source", "quantity").values[source, at])
        for name in ("frequency", "width", "share")
        if f"resonance_{name}" in dataset
    ]
    if len(values) < 3 or not np.isfinite(values).all() or values[2] < 0.5:
        return
    frequency, width, share = values
    ax.axvspan(frequency - width, frequency + width, color=LIGHT["faint"], lw=0, zorder=1)
    period = amount(1.0 / frequency, reading.time_unit(dataset), 3)
    left = np.log(frequency / ax.get_xlim()[0]) > 0.5 * np.log(ax.get_xlim()[1] / ax.get_xlim()[0])
    ax.annotate(
        f"period {period}: {number(100 * share, 2)} %\nof what its source gives",
        (frequency, 0.98),
        xycoords=("data", "axes fraction"),
        xytext=(-14 if left else 14, 0),
        textcoords="offset points",
        ha="right" if left else "left",
        va="top",
        fontsize=10,
        color=LIGHT["soft"],
    )
