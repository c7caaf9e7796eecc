"""The numbers behind each figure, for reading values at a time in the page."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr

from nipc.arrays import FloatArray
from nipc.report import reading


@dataclass(frozen=True)
class Line:
    """One number that is read off a figure: what it is called, and its values over time.

    `form`: "digits:3" significant ones, "decimals:2", or "percent".
    """

    label: str
    values: FloatArray
    unit: str
    trust: reading.Trust
    form: str = "digits:3"


def lines(dataset: xr.Dataset, figure: str, quantity: str | None) -> list[Line]:
    """What can be read off a figure at a time; nothing when it is not over time."""
    if figure == "joint_confinement" and quantity is not None:
        return _probabilities(
            lambda name: reading.joint_series(dataset, f"joint_{name}", quantity),
            reading.trust(dataset, None),
        )
    if quantity is None:
        form = "percent" if figure != "spread_rate" else "digits:3"
        names = {
            "spread_rate": "spread_rate",
            "nonlinear_share": "nonlinear_share",
            "check_error": "check_error",
        }
        unit = f"1/{reading.time_unit(dataset)}" if figure == "spread_rate" else ""
        if figure not in names:
            return []
        found = []
        for each in reading.quantities(dataset):
            values = reading.series(dataset, names[figure], each)
            if values is not None:
                found.append(Line(each, values, unit, reading.trust(dataset, each), form))
        return found
    makers = {
        "bands": _bands,
        "confinement": _confinement,
        "driver_shares": _shares,
        "diffusion": _variance,
    }
    return makers[figure](dataset, quantity) if figure in makers else []


def _bands(dataset: xr.Dataset, quantity: str) -> list[Line]:
    unit, trust = reading.unit(dataset, quantity), reading.trust(dataset, quantity)
    found, form = [], _decimals(reading.series(dataset, "std", quantity))
    for level, label in ((0.5, "median"), (0.025, "2.5 %"), (0.975, "97.5 %")):
        values = reading.quantile(dataset, level, quantity)
        if values is not None:
            found.append(Line(label, values, unit, trust, form))
    for name in ("mean", "std"):
        values = reading.series(dataset, name, quantity)
        if values is not None:
            found.append(Line(name, values, unit, trust, form if name == "mean" else "digits:2"))
    return found


def _decimals(std: FloatArray | None) -> str:
    """As many decimals as two digits of the usual spread need."""
    typical = 0.0 if std is None else float(np.nanmedian(std))
    if not typical > 0:
        return "digits:6"
    return f"decimals:{min(max(1 - math.floor(math.log10(typical)), 0), 12)}"


def _confinement(dataset: xr.Dataset, quantity: str) -> list[Line]:
    return _probabilities(
        lambda name: reading.series(dataset, name, quantity), reading.trust(dataset, quantity)
    )


def _probabilities(series: Callable[[str], FloatArray | None], trust: reading.Trust) -> list[Line]:
    found = []
    for name, label in (
        ("inside_probability", "inside"),
        ("survival_probability", "inside all the time"),
    ):
        values = series(name)
        if values is not None:
            found.append(Line(label, values, "", trust, "decimals:3"))
    return found


def _shares(dataset: xr.Dataset, quantity: str) -> list[Line]:
    shares = reading.shares(dataset, "driver_first", quantity)
    if shares is None:
        return []
    names, trust = reading.sources(dataset), reading.trust(dataset, quantity)
    return [Line(name, row, "", trust, "percent") for name, row in zip(names, shares, strict=True)]


def _variance(dataset: xr.Dataset, quantity: str) -> list[Line]:
    spread = reading.series(dataset, "std", quantity)
    if spread is None:
        return []
    unit, trust = reading.unit(dataset, quantity), reading.trust(dataset, quantity)
    return [Line("standard deviation", spread, unit, trust)]


def compact(values: FloatArray, form: str = "digits:5") -> list[float | None]:
    """No more digits than are shown; None where there is no number (JSON has no NaN)."""
    kind, _, digits = form.partition(":")
    wanted = f".{digits}f" if kind == "decimals" else f".{int(digits or 3) + 1}g"
    return [float(format(v, wanted)) if np.isfinite(v) else None for v in np.asarray(values, float)]


def block(every: list[Line]) -> list[dict[str, Any]]:
    """As it is stored in the page."""
    return [
        {
            "label": line.label,
            "unit": line.unit,
            "form": line.form,
            "values": compact(line.values, line.form),
            "paths": _known(line.trust.paths),
            "distribution": _known(line.trust.distribution),
        }
        for line in every
    ]


def _known(time: float) -> float | None:
    return time if np.isfinite(time) else None
