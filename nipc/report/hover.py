"""The numbers behind each figure, for reading values at a time in the page."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr

from nipc.arrays import FloatArray
from nipc.report import reading


@dataclass(frozen=True)
class Line:
    """One number that is read off a figure: what it is called, and its values over time."""

    label: str
    values: FloatArray
    unit: str = ""


def lines(dataset: xr.Dataset, figure: str, quantity: str | None) -> list[Line]:
    """What can be read off a figure at a time; nothing when it is not over time."""
    if quantity is None:
        names = {"spread_rate": "spread_rate", "nonlinear_share": "nonlinear_share",
                 "check_error": "check_error"}
        unit = f"1/{reading.time_unit(dataset)}" if figure == "spread_rate" else ""
        if figure not in names:
            return []
        found = []
        for each in reading.quantities(dataset):
            values = reading.series(dataset, names[figure], each)
            if values is not None:
                found.append(Line(each, values, unit))
        return found
    makers = {"bands": _bands, "confinement": _confinement, "driver_shares": _shares,
              "diffusion": _variance}
    return makers[figure](dataset, quantity) if figure in makers else []


def _bands(dataset: xr.Dataset, quantity: str) -> list[Line]:
    unit, found = reading.unit(dataset, quantity), []
    for level, label in ((0.5, "median"), (0.025, "2.5 %"), (0.975, "97.5 %")):
        values = reading.quantile(dataset, level, quantity)
        if values is not None:
            found.append(Line(label, values, unit))
    for name in ("mean", "std"):
        values = reading.series(dataset, name, quantity)
        if values is not None:
            found.append(Line(name, values, unit))
    return found


def _confinement(dataset: xr.Dataset, quantity: str) -> list[Line]:
    found = []
    for name, label in (("inside_probability", "inside"),
                        ("survival_probability", "inside all the time")):
        values = reading.series(dataset, name, quantity)
        if values is not None:
            found.append(Line(label, values))
    return found


def _shares(dataset: xr.Dataset, quantity: str) -> list[Line]:
    shares = reading.shares(dataset, "driver_first", quantity)
    if shares is None:
        return []
    return [Line(name, row) for name, row in zip(reading.sources(dataset), shares, strict=True)]


def _variance(dataset: xr.Dataset, quantity: str) -> list[Line]:
    spread = reading.series(dataset, "std", quantity)
    if spread is None:
        return []
    return [Line("standard deviation", spread, reading.unit(dataset, quantity))]


def compact(values: FloatArray) -> list[float | None]:
    """Six significant digits; None where there is no number (JSON has no NaN)."""
    return [float(f"{v:.6g}") if np.isfinite(v) else None for v in np.asarray(values, float)]


def block(every: list[Line]) -> list[dict[str, Any]]:
    """As it is stored in the page."""
    return [{"label": line.label, "unit": line.unit, "values": compact(line.values)}
            for line in every]
