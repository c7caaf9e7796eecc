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

    `form`: "digits:3" significant ones, "decimals:2", "percent", or "text".
    """

    label: str
    values: FloatArray | list[str]
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
    if figure == "chain":
        return _arcs(dataset)
    if quantity is None:
        form = "percent" if figure != "spread_rate" else "digits:3"
        names = {
            "spread_rate": "spread_rate",
            "nonlinear_share": "nonlinear_share",
            "check_error": "check_error",
        }
        clock = reading.time_unit(dataset)
        unit = f"1/{clock}" if figure == "spread_rate" and clock else ""
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
    shares = np.where(reading.unknown_shares(dataset, quantity), np.nan, shares)
    return [Line(name, row, "", trust, "percent") for name, row in zip(names, shares, strict=True)]


def _variance(dataset: xr.Dataset, quantity: str) -> list[Line]:
    spread = reading.series(dataset, "std", quantity)
    if spread is None:
        return []
    unit, trust = reading.unit(dataset, quantity), reading.trust(dataset, quantity)
    return [Line("standard deviation", spread, unit, trust)]


def _arcs(dataset: xr.Dataset) -> list[Line]:
    """The arc at each time; not marked, since that is how it was and no answer."""
    times = reading.times(dataset)
    ends, end = np.asarray(dataset["arc_end"].values, float), float(times[-1])
    arc = np.searchsorted(ends + 1e-12 * max(abs(end), abs(float(ends[-1]))), times)
    inside = arc < ends.size
    arc = np.minimum(arc, ends.size - 1)
    known = reading.Trust(end, end, end)
    found = [Line("arc", np.where(inside, arc + 1.0, np.nan), "", known, "digits:6")]
    for name in ("degree", "terms", "runs", "failed", "error"):
        if reading.has(dataset, f"arc_{name}"):
            values = np.where(inside, np.asarray(dataset[f"arc_{name}"].values, float)[arc], np.nan)
            form = "percent" if name == "error" else "digits:6"
            found.append(Line(name, values, "", known, form))
    if "arc_note" in dataset:
        notes = [str(dataset["arc_note"].values[k]) for k in arc]
        if any(notes):
            shown = [note if there else "" for note, there in zip(notes, inside, strict=True)]
            found.append(Line("note:", shown, "", known, "text"))
    return found


def compact(
    values: FloatArray | list[str], form: str = "digits:5"
) -> list[float | None] | list[str]:
    """No more digits than are shown; None where there is no number (JSON has no NaN)."""
    kind, _, digits = form.partition(":")
    if kind == "text":
        return [str(value) for value in values]
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
