"""Whether the degree is high enough: how the coefficients fall off with it."""

from __future__ import annotations

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from nipc.report import reading
from nipc.report.figures import frame
from nipc.report.figures.spreading import log_labels
from nipc.report.style import LIGHT, drawn


@drawn
def coefficient_decay(dataset: xr.Dataset, ax: Axes | None = None) -> Axes:
    """Norm of the coefficients of each total degree, over that of all but the constant, per arc."""
    if not reading.has(dataset, "degree_norm"):
        raise KeyError("the result does not tell its coefficients by degree")
    norms = np.asarray(dataset["degree_norm"].transpose("arc", "degree").values, float)
    degrees = np.asarray(dataset["degree"].values, float)
    norms = np.where(norms > 0, norms, np.nan)
    ax = frame.new_axes(ax)
    ax.set_yscale("log")
    lines = ax.plot(degrees, norms.T, color=LIGHT["soft"], lw=0.5, alpha=0.6)
    held = ~np.isnan(norms).all(axis=0)
    middle = np.nanmedian(norms[:, held], axis=0)
    line = ax.plot(degrees[held], middle, color=LIGHT["main"], lw=1.8, marker="o", ms=5)[0]
    bottom, top = float(np.nanmin(norms)), float(np.nanmax(norms))
    ax.set_ylim(0.5 * bottom, 2.0 * top)
    log_labels(ax, "y")
    ax.xaxis.set_major_locator(MaxNLocator(integer=True))
    ax.set_xlabel("total degree")
    ax.set_ylabel("norm of the coefficients\nover that of all")
    frame.legend(ax, [line, lines[0]], ["median of the arcs", "each arc"])
    return ax
