"""Why runs failed, and where they lay in the germ."""

from __future__ import annotations

import textwrap
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.ticker import MaxNLocator

from nipc.arrays import FloatArray
from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.style import LIGHT, drawn

SHOWN = 8
WIDEST = 4.2  # standard deviations
ROWS, UNTOLD, FEWEST = 6, 3, 3  # directions shown, if none tells, runs of each kind in one


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


@drawn
def failure_places(dataset: xr.Dataset, ax: Axes | None = None) -> Axes:
    """Values at which runs failed, beside good runs, in the directions that tell them best apart.

    A row a direction of the germ; values count from the mean of a batch in its standard deviations.
    The share is the probability that a failed run lies beyond a good one, told where chance alone
    would part them so far in one of a thousand pictures (Mann and Whitney 1947).
    """
    from scipy.stats import norm

    if not reading.has(dataset, "failed_position"):
        raise KeyError("the result does not tell where runs failed")
    names = [str(name) for name in dataset["direction"].values]
    failed, good = (
        np.asarray(
            dataset[f"{which}_position"].transpose(f"{which}_run", "direction").values, float
        )
        for which in ("failed", "good")
    )
    names, failed, good = _with_distance(names, failed, good)
    told = np.array([_beyond(failed[:, k], good[:, k]) for k in range(len(names))])
    shares, telling = told[:, 0], np.nan_to_num(np.abs(told[:, 1]), nan=-1.0)
    order = [k for k in np.argsort(-telling, kind="stable")[:ROWS] if telling[k] >= 0]
    sure = float(norm.isf(0.5e-3 / len(names)))
    if not (telling > sure).any():
        order = order[:UNTOLD]
    if not order:
        raise KeyError("no direction has failed runs beside good ones")
    ax = frame.new_axes(ax, height=1.2 + 0.42 * len(order))
    rng = np.random.default_rng(1)
    for row, k in enumerate(order):
        looks: tuple[tuple[FloatArray, int, dict[str, Any]], ...] = (
            (good[:, k], -1, {"marker": "o", "ms": 2.6, "color": LIGHT["soft"], "alpha": 0.5}),
            (failed[:, k], 1, {"marker": "x", "ms": 4.5, "color": LIGHT["edge"], "alpha": 0.9}),
        )
        for values, side, look in looks:
            shown = np.clip(values[np.isfinite(values)], -WIDEST, WIDEST)
            height = row + side * (0.06 + 0.26 * rng.random(shown.size))
            ax.plot(shown, height, ls="", mew=0.9 if side > 0 else 0, **look)
        share = float(shares[k])
        words = f"{max(share, 1 - share):.0%} {'higher' if share > 0.5 else 'lower'}"
        words = words if telling[k] > sure else "no sign"
        ax.text(1.01, row, words, transform=ax.get_yaxis_transform(), fontsize=9, va="center")
    ax.set_yticks(
        range(len(order)), [textwrap.fill(frame.printable(names[k]), 18) for k in order], fontsize=9
    )
    ax.set_ylim(len(order) - 0.5, -0.5)
    ax.set_xlim(-WIDEST, WIDEST)
    ax.grid(False, axis="y")
    ax.set_xlabel("standard deviations from the mean of the runs")
    keys = [
        Line2D([], [], ls="", marker="o", ms=3.5, color=LIGHT["soft"]),
        Line2D([], [], ls="", marker="x", ms=5, color=LIGHT["edge"]),
    ]
    frame.legend(ax, keys, ["good runs", "failed runs"])
    return ax


def _with_distance(
    names: list[str], failed: FloatArray, good: FloatArray
) -> tuple[list[str], FloatArray, FloatArray]:
    """One direction more: how far out a run lies in all of them, scaled as they are."""
    if len(names) < 2:
        return names, failed, good
    ends = [np.sqrt(np.nanmean(rows**2, axis=1)) for rows in (failed, good)]
    middle, spread = ends[1].mean(), ends[1].std()
    if not spread > 0:
        return names, failed, good
    more = [((end - middle) / spread)[:, None] for end in ends]
    names = [*names, "distance from the centre"]
    return names, np.hstack([failed, more[0]]), np.hstack([good, more[1]])


def _beyond(failed: FloatArray, good: FloatArray) -> tuple[float, float]:
    """P(a failed run's value is above a good one's), and by how many standard errors from half."""
    failed, good = failed[np.isfinite(failed)], np.sort(good[np.isfinite(good)])
    n, m = failed.size, good.size
    if n < FEWEST or m < FEWEST:
        return float("nan"), float("nan")
    below, upto = (np.searchsorted(good, failed, side=side) for side in ("left", "right"))
    share = float(0.5 * (below + upto).mean() / m)
    return share, (share - 0.5) / ((n + m + 1) / (12.0 * n * m)) ** 0.5


def frame_safe(reason: str) -> str:
    """A reason as a label, however long its words are."""
    return "\u200a" + reason if reason.startswith("_") else reason or "(no reason given)"
