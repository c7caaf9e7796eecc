"""What it cost: arcs along the horizon with their length, degree, runs and error, and why."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

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
from nipc.report.notes import kinds
from nipc.report.style import LIGHT, drawn

REASONS = 6
ROW = 0.34  # inches a reason takes


@drawn
def chain(dataset: xr.Dataset, axes: Sequence[Axes] | None = None) -> tuple[Axes, ...]:
    """Arcs one after the other, each as wide as it is long.

    Panels from above, those that the result has: length (where arcs differ in it), degree, runs
    (failed ones in red) with the number of terms, held-out error (and what was allowed), and which
    arcs have which note. `axes`: one for each panel, or none for a new figure.
    """
    if not all(reading.has(dataset, f"arc_{what}") for what in ("start", "end", "runs")):
        raise KeyError("the result has no arcs")
    start, end = (np.asarray(dataset[f"arc_{side}"].values, float) for side in ("start", "end"))
    panels = _panels(dataset, start, end)
    if axes is None:
        heights = [ROW * panels[name][1] if name == "note" else 1.0 for name in panels]
        axes = frame.new_figure(len(panels), 0.9 + 1.12 * sum(heights), heights)
    if len(axes) != len(panels):
        raise ValueError(f"{len(panels)} axes are needed, not {len(axes)}")
    frame.time_axis(axes[-1], dataset)
    low, high = axes[-1].get_xlim()
    axes[-1].set_xlim(min(low, float(start[0])), max(high, float(end[-1])))
    for ax, (draw, _) in zip(axes, panels.values(), strict=True):
        draw(ax, dataset, start, end)
        if end[-1] < high - 1e-9 * (high - low):
            _beyond(ax, float(end[-1]), high, first=ax is axes[0])
    for ax in axes[:-1]:
        ax.tick_params(labelbottom=False)
    figure = axes[0].figure
    if isinstance(figure, Figure):
        figure.align_ylabels(list(axes))
    return tuple(axes)


Draw = Callable[[Axes, xr.Dataset, FloatArray, FloatArray], None]


def _panels(dataset: xr.Dataset, start: FloatArray, end: FloatArray) -> dict[str, tuple[Draw, int]]:
    """What is drawn, from above, and how many rows each has."""
    lengths = end - start
    found: dict[str, tuple[Draw, int]] = {}
    if lengths.max() > 1.01 * lengths.min():
        found["length"] = (_lengths, 1)
    if reading.has(dataset, "arc_degree"):
        found["degree"] = (_degrees, 1)
    found["runs"] = (_runs, 1)
    if reading.has(dataset, "arc_error"):
        found["error"] = (_errors, 1)
    reasons = _reasons(dataset)
    if reasons:
        found["note"] = (_notes, len(reasons))
    return found


def _bars(ax: Axes, values: FloatArray, start: FloatArray, end: FloatArray) -> None:
    """A filled step an arc, with seams where they can be told apart."""
    edges = np.append(start, end[-1])
    ax.stairs(values, edges, fill=True, color=LIGHT["band"], lw=0, zorder=2)
    ax.stairs(values, edges, color=LIGHT["main"], lw=1.1, zorder=3)
    if len(start) <= 80:
        tops = np.minimum(values[1:], values[:-1])
        ax.vlines(edges[1:-1], 0, tops, color=LIGHT["paper"], lw=0.5, zorder=2.5)


def _counted(ax: Axes, top: float, label: str) -> None:
    ax.set_ylim(0, 1.15 * top or 1.0)
    ax.yaxis.set_major_locator(MaxNLocator(nbins=4, integer=True))
    ax.set_ylabel(label)


def _lengths(ax: Axes, dataset: xr.Dataset, start: FloatArray, end: FloatArray) -> None:
    lengths = end - start
    if lengths.max() > 10 * lengths.min():
        ax.set_yscale("log")
        ax.set_ylim(0.5 * float(lengths.min()), 2.0 * float(lengths.max()))
        ax.stairs(lengths, np.append(start, end[-1]), color=LIGHT["main"], lw=1.3, baseline=None)
        log_labels(ax, "y")
    else:
        _bars(ax, lengths, start, end)
        ax.set_ylim(0, 1.15 * float(lengths.max()))
        ax.yaxis.set_major_locator(MaxNLocator(nbins=4))
    ax.set_ylabel(frame.with_unit("length", reading.time_unit(dataset)))


def _degrees(ax: Axes, dataset: xr.Dataset, start: FloatArray, end: FloatArray) -> None:
    degrees = np.asarray(dataset["arc_degree"].values, float)
    _bars(ax, degrees, start, end)
    _counted(ax, float(np.nanmax(degrees)), "degree")


def _runs(ax: Axes, dataset: xr.Dataset, start: FloatArray, end: FloatArray) -> None:
    runs = np.asarray(dataset["arc_runs"].values, float)
    _bars(ax, runs, start, end)
    handles, labels = [frame.patch_key("band")], ["runs"]
    if reading.has(dataset, "arc_failed") and (dataset["arc_failed"].values > 0).any():
        failed = np.asarray(dataset["arc_failed"].values, float)
        ax.bar(
            start, failed, width=end - start, align="edge", lw=0, zorder=4, color=LIGHT["edge"],
            hatch="////", edgecolor=LIGHT["paper"],
        )  # fmt: skip
        handles.append(frame.patch_key("edge", hatch="////"))
        labels.append("of these failed")
    if reading.has(dataset, "arc_terms"):
        terms = np.asarray(dataset["arc_terms"].values, float)
        look: dict[str, Any] = {"color": LIGHT["ink"], "lw": 1.2, "ls": (0, (3, 1.5))}
        ax.stairs(terms, np.append(start, end[-1]), baseline=None, zorder=5, **look)
        handles.append(Line2D([], [], **look))
        labels.append("terms")
    _counted(ax, float(np.nanmax(runs)), "runs")
    if len(labels) > 1:
        frame.legend(ax, handles, labels)


def _errors(ax: Axes, dataset: xr.Dataset, start: FloatArray, end: FloatArray) -> None:
    values = np.asarray(dataset["arc_error"].values, float)
    ax.set_yscale("log")
    good = np.isfinite(values) & (values > 0)
    middle, ink = 0.5 * (start + end), LIGHT["main"]
    ax.hlines(values[good], start[good], end[good], color=ink, lw=1.0)
    ax.plot(middle[good], values[good], ls="", marker="o", ms=3.5, color=ink, mew=0)
    handles, labels = [Line2D([], [], ls="", marker="o", ms=4, color=ink)], ["held-out error"]
    shown = [values[good]]
    if reading.has(dataset, "arc_allowed"):
        allowed = np.asarray(dataset["arc_allowed"].values, float)
        look: dict[str, Any] = {"color": LIGHT["edge"], "lw": 1.2, "ls": (0, (7, 2, 1.5, 2))}
        ax.stairs(allowed, np.append(start, end[-1]), baseline=None, **look)
        shown.append(allowed[np.isfinite(allowed)])
        handles.append(Line2D([], [], **look))
        labels.append("allowed")
    bad = ~np.isfinite(values)
    if bad.any():
        top = float(np.nanmax(values[good], initial=1.0))
        ax.plot(middle[bad], np.full(bad.sum(), top), ls="", marker="x", ms=6, color=LIGHT["edge"])
        handles.append(Line2D([], [], ls="", marker="x", ms=6, color=LIGHT["edge"]))
        labels.append("not known")
        shown.append(np.array([top]))
    every = np.concatenate(shown)
    if every.size:
        ax.set_ylim(0.5 * float(every.min()), 2.0 * float(every.max()))
    log_labels(ax, "y")
    ax.set_ylabel("error")
    if len(labels) > 1:
        frame.legend(ax, handles, labels)


def _reasons(dataset: xr.Dataset) -> dict[str, FloatArray]:
    """Notes and which arcs have them, in the order in which they first come."""
    if "arc_note" not in dataset:
        return {}
    told = kinds([str(note) for note in dataset["arc_note"].values])
    most = sorted(told, key=lambda words: -len(told[words]))[:REASONS]
    return {words: np.array(arcs) for words, arcs in told.items() if words in most}


def _notes(ax: Axes, dataset: xr.Dataset, start: FloatArray, end: FloatArray) -> None:
    """A row a reason: its words, and below them a bar for every arc that has it."""
    reasons = _reasons(dataset)
    for row, (words, arcs) in enumerate(reasons.items()):
        spans = [(start[arc], end[arc] - start[arc]) for arc in arcs]
        ax.broken_barh(
            spans, (row + 0.56, 0.3), color=LIGHT["main"], edgecolor=LIGHT["paper"], lw=0.4
        )
        ax.text(
            0.01, row + 0.46, words, transform=ax.get_yaxis_transform(), fontsize=9, va="bottom"
        )
    ax.set_ylim(len(reasons), 0)
    ax.set_yticks([])
    ax.grid(False, axis="y")
    ax.set_ylabel("why")


def _beyond(ax: Axes, reached: float, last: float, first: bool) -> None:
    """Where there are no arcs any more."""
    ax.axvspan(
        reached, last, facecolor="none", edgecolor=LIGHT["doubt"], hatch="//", lw=0, zorder=1
    )
    if first:
        ax.text(
            0.5 * (reached + last), 0.5, "no arcs", transform=ax.get_xaxis_transform(),
            ha="center", va="center", fontsize=10, color=LIGHT["ink"],
            bbox={"facecolor": LIGHT["paper"], "edgecolor": "none", "pad": 2.0},
        )  # fmt: skip
