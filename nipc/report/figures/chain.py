"""What it cost: arcs along the horizon with their length, degree, runs and error."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import MaxNLocator

from nipc.arrays import FloatArray
from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.figures.spreading import log_labels
from nipc.report.style import LIGHT, drawn


@drawn
def chain(dataset: xr.Dataset, axes: Sequence[Axes] | None = None) -> tuple[Axes, ...]:
    """One bar per arc: its runs (failed ones in red) with its degree above, and its error below.

    The width of a bar is the arc's length. `axes`: two of them, or none for a new figure.
    """
    if not all(reading.has(dataset, f"arc_{what}") for what in ("start", "end", "runs")):
        raise KeyError("the result has no arcs")
    start, end = (np.asarray(dataset[f"arc_{side}"].values, float) for side in ("start", "end"))
    edges, count = np.append(start, end[-1]), len(start)
    panels = ["arc_degree", "arc_runs", "arc_error"]
    panels = [name for name in panels if reading.has(dataset, name)]
    if axes is None:
        axes = frame.new_figure(len(panels), 1.1 + 1.15 * len(panels))
    if len(axes) != len(panels):
        raise ValueError(f"{len(panels)} axes are needed, not {len(axes)}")
    for ax, name in zip(axes, panels, strict=True):
        values = np.asarray(dataset[name].values, float)
        if name == "arc_error":
            _errors(ax, dataset, start, end, values)
            continue
        ax.stairs(values, edges, fill=True, color=LIGHT["band"], lw=0, zorder=2)
        ax.stairs(values, edges, color=LIGHT["main"], lw=1.1, zorder=3)
        if count <= 80:
            ax.vlines(
                edges[1:-1],
                0,
                np.minimum(values[1:], values[:-1]),
                color=LIGHT["paper"],
                lw=0.5,
                zorder=2.5,
            )
        ax.set_ylim(0, 1.15 * float(np.nanmax(values)) or 1.0)
        ax.yaxis.set_major_locator(MaxNLocator(nbins=4, integer=True))
        ax.set_ylabel({"arc_degree": "degree", "arc_runs": "runs"}[name])
        if name == "arc_runs":
            _failures(ax, dataset, start, end)
    frame.time_axis(axes[-1], dataset)
    axes[-1].set_xlim(float(edges[0]), float(edges[-1]))
    for ax in axes[:-1]:
        ax.tick_params(labelbottom=False)
    figure = axes[0].figure
    if isinstance(figure, Figure):
        figure.align_ylabels(list(axes))
    return tuple(axes)


def _failures(ax: Axes, dataset: xr.Dataset, start: FloatArray, end: FloatArray) -> None:
    if not reading.has(dataset, "arc_failed"):
        return
    failed = np.asarray(dataset["arc_failed"].values, float)
    at = failed > 0
    if at.any():
        ax.bar(
            start[at],
            failed[at],
            width=(end - start)[at],
            align="edge",
            lw=0,
            zorder=4,
            color=LIGHT["edge"],
            hatch="////",
            edgecolor=LIGHT["paper"],
        )
        frame.legend(
            ax,
            [frame.patch_key("band"), frame.patch_key("edge", hatch="////")],
            ["runs", "of these failed"],
        )


def _errors(
    ax: Axes, dataset: xr.Dataset, start: FloatArray, end: FloatArray, values: FloatArray
) -> None:
    ax.set_yscale("log")
    good = np.isfinite(values) & (values > 0)
    ax.plot(
        0.5 * (start + end)[good],
        values[good],
        ls="",
        marker="o",
        ms=3.5,
        color=LIGHT["main"],
        mew=0,
    )
    bad = ~np.isfinite(values)
    if bad.any():
        ax.plot(
            0.5 * (start + end)[bad],
            np.full(bad.sum(), np.nanmax(values[good], initial=1.0)),
            ls="",
            marker="x",
            ms=6,
            color=LIGHT["edge"],
        )
        frame.legend(
            ax, [Line2D([], [], ls="", marker="x", ms=6, color=LIGHT["edge"])], ["not known"]
        )
    if good.any():
        top = max(float(values[good].max()), 1.0 if bad.any() else 0.0)
        ax.set_ylim(0.5 * float(values[good].min()), 2.0 * top)
    log_labels(ax, "y")
    ax.set_ylabel("error")
