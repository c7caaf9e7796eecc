"""What the figures and the page ask of a result, with one answer when it is not there: None."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from nipc.arrays import FloatArray
from nipc.report.numbers import pretty_unit

WIDE = 0.6
"""An interval of a share wider than this says nothing."""


def has(dataset: xr.Dataset, name: str) -> bool:
    """Whether a variable is there and holds at least one value that is not NaN."""
    if name not in dataset:
        return False
    values = dataset[name].values
    return bool(values.size) and (values.dtype.kind not in "fc" or not bool(np.isnan(values).all()))


def quantities(dataset: xr.Dataset) -> list[str]:
    """Names of the quantities, in the order of the study."""
    return [str(name) for name in dataset["quantity"].values]


def sources(dataset: xr.Dataset) -> list[str]:
    """Names of the noise sources, then "start", then the parameters."""
    return [str(name) for name in dataset["source"].values] if "source" in dataset.coords else []


def position(dataset: xr.Dataset, quantity: str) -> int:
    """Where a quantity stands; KeyError with the names there are."""
    names = quantities(dataset)
    if quantity not in names:
        raise KeyError(f"no quantity {quantity!r}; there are {', '.join(names)}")
    return names.index(quantity)


def unit(dataset: xr.Dataset, quantity: str) -> str:
    """Unit of a quantity, "" for a pure number."""
    index = position(dataset, quantity)
    if "quantity_unit" in dataset:
        found = str(dataset["quantity_unit"].values[index])
    else:
        found = str(dataset["mean"].attrs.get("units", "")) if "mean" in dataset else ""
    return "" if found in ("1", "-") else pretty_unit(found)


def time_unit(dataset: xr.Dataset) -> str:
    """Unit of the clock."""
    found = dataset.attrs.get("time_unit") or dataset["time"].attrs.get("units", "")
    return pretty_unit(str(found))


def times(dataset: xr.Dataset) -> FloatArray:
    """Output times (time,)."""
    return np.asarray(dataset["time"].values, float)


def series(dataset: xr.Dataset, name: str, quantity: str) -> FloatArray | None:
    """One quantity's part of a variable, the quantity axis removed."""
    if name not in dataset:
        return None
    part = dataset[name].isel(quantity=position(dataset, quantity)).values
    part = np.asarray(part, float)
    return part if part.size and not bool(np.isnan(part).all()) else None


def scalar(dataset: xr.Dataset, name: str, quantity: str) -> float:
    """One number of a quantity; NaN when there is none."""
    found = series(dataset, name, quantity)
    return float("nan") if found is None else float(found)


def last(dataset: xr.Dataset, name: str, quantity: str) -> float:
    """The value at the end of the horizon; NaN when there is none."""
    found = series(dataset, name, quantity)
    return float("nan") if found is None else float(found[..., -1])


def joints(dataset: xr.Dataset) -> list[str]:
    """Names of the boxes of several quantities."""
    return [str(name) for name in dataset["joint"].values] if "joint" in dataset.coords else []


def joint_series(dataset: xr.Dataset, name: str, joint: str) -> FloatArray | None:
    """A joint box's part of a variable over time."""
    if name not in dataset:
        return None
    part = dataset[name].isel(joint=joints(dataset).index(joint)).values
    part = np.asarray(part, float)
    return part if part.size and not bool(np.isnan(part).all()) else None


def text(dataset: xr.Dataset, name: str, quantity: str) -> str:
    """One string of a quantity, "" when there is none."""
    if name not in dataset:
        return ""
    return str(dataset[name].values[position(dataset, quantity)])


def quantile(dataset: xr.Dataset, level: float, quantity: str) -> FloatArray | None:
    """Quantile over time at the level nearest to the one asked, if it is within 0.01."""
    found = series(dataset, "quantile", quantity)
    if found is None:
        return None
    levels = np.asarray(dataset["level"].values, float)
    index = int(np.argmin(np.abs(levels - level)))
    return found[index] if abs(levels[index] - level) <= 0.01 else None


def shares(dataset: xr.Dataset, name: str, quantity: str) -> FloatArray | None:
    """Driver shares (source, time) of a quantity."""
    if name not in dataset:
        return None
    part = dataset[name].isel(quantity=position(dataset, quantity))
    values = np.asarray(part.transpose("source", ...).values, float)
    return values if values.size and not bool(np.isnan(values).all()) else None


def unknown_shares(dataset: xr.Dataset, quantity: str) -> NDArray[np.bool_]:
    """(time,) where an interval of some source's share is so wide that shares say nothing."""
    wide = np.zeros(dataset.sizes["time"], bool)
    for name in ("driver_first", "driver_total"):
        low, high = (shares(dataset, name + side, quantity) for side in ("_low", "_high"))
        if low is not None and high is not None:
            wide |= np.nan_to_num(high - low).max(axis=0) > WIDE
    return wide


def main_driver(dataset: xr.Dataset, quantity: str) -> tuple[str, float, bool] | None:
    """The largest share at the end: source, share, and whether it is a total share.

    None where there is no spread, or where the shares are not known.
    """
    if unknown_shares(dataset, quantity)[-1]:
        return None
    for name in ("driver_total", "driver_first"):
        found = shares(dataset, name, quantity)
        if found is not None and not np.isnan(found[:, -1]).all():
            index = int(np.nanargmax(found[:, -1]))
            # an estimate of a share may pass one, a share may not
            share = min(float(found[index, -1]), 1.0)
            return sources(dataset)[index], share, name == "driver_total"
    return None


@dataclass(frozen=True)
class Box:
    """The interval in which a quantity should stay; an edge may be infinite."""

    low: float
    high: float

    @property
    def edges(self) -> list[float]:
        """The finite edges."""
        return [edge for edge in (self.low, self.high) if np.isfinite(edge)]


def box(dataset: xr.Dataset, quantity: str) -> Box | None:
    """The quantity's box; None when it has none."""
    low, high = scalar(dataset, "box_low", quantity), scalar(dataset, "box_high", quantity)
    low = -np.inf if np.isnan(low) else low
    high = np.inf if np.isnan(high) else high
    return Box(low, high) if np.isfinite(low) or np.isfinite(high) else None


@dataclass(frozen=True)
class Trust:
    """How far a quantity's answers may be trusted.

    `paths`: up to when single paths agree with direct runs; `distribution`: up to when the
    distribution does (never before `paths`). NaN: it was not checked.
    """

    paths: float
    distribution: float
    end: float

    @property
    def checked(self) -> bool:
        return bool(np.isfinite(self.paths) or np.isfinite(self.distribution))

    def mark(self, time: float) -> str:
        """ "" when trusted at this time, "†" for the distribution alone, "‡" when not at all."""
        slack = 1e-9 * max(abs(self.end), 1.0)
        if self.checked and time <= self.paths + slack:
            return ""
        return "†" if self.checked and time <= self.distribution + slack else "‡"


def trust(dataset: xr.Dataset, quantity: str | None) -> Trust:
    """The trust horizons of a quantity; of none: the earliest of all, NaN where one is."""
    end = float(times(dataset)[-1])
    if quantity is None:
        every = [trust(dataset, name) for name in quantities(dataset)]
        first = float(np.min([t.paths for t in every]))
        return Trust(first, float(np.min([t.distribution for t in every])), end)
    paths = scalar(dataset, "trust_horizon", quantity)
    found = scalar(dataset, "trust_horizon_distribution", quantity)
    return Trust(paths, float(np.fmax(paths, found)), end)


def listed(dataset: xr.Dataset, name: str) -> Any:
    """An attribute that holds JSON, decoded; None when it is missing or broken."""
    try:
        return json.loads(dataset.attrs[name])
    except (KeyError, TypeError, ValueError):
        return None
