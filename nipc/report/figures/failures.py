"""Why runs failed, and how many for each reason."""

from __future__ import annotations

import textwrap

import xarray as xr
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.style import LIGHT, drawn

SHOWN = 8


@drawn
def failures(dataset: xr.Dataset, ax: Axes | None = None) -> Axes:
    """Number of failed runs by reason, the most frequent first."""
    found = reading.listed(dataset, "failures")
    if not found:
        raise KeyError("no run failed")
    rows = sorted(((str(f["reason"]), int(f["count"])) for f in found), key=lambda r: -r[1])[:SHOWN]
    ax = frame.new_axes(ax, height=1.0 + 0.42 * len(rows))
    ax.barh(
        range(len(rows)),
        [count for _, count in rows],
        height=0.6,
        color=LIGHT["edge"],
        hatch="////",
        edgecolor=LIGHT["paper"],
        lw=0,
        zorder=2,
    )
    for row, (_, count) in enumerate(rows):
        ax.annotate(
            str(count), (count, row), xytext=(5, 0), textcoords="offset points", va="center"
        )
    names = [textwrap.shorten(" ".join(reason.split()), 60, placeholder="…") for reason, _ in rows]
    ax.set_yticks(range(len(rows)), [textwrap.fill(frame_safe(n), 30) for n in names], fontsize=9)
    ax.set_ylim(len(rows) - 0.4, -0.6)
    ax.set_xlim(0, 1.12 * max(count for _, count in rows))
    ax.xaxis.set_major_locator(MaxNLocator(nbins=6, integer=True))
    ax.grid(False, axis="y")
    ax.set_xlabel("failed runs")
    return ax


def frame_safe(reason: str) -> str:
    """A reason as a label, however long its words are."""
    return "\u200a" + reason if reason.startswith("_") else reason or "(no reason given)"
