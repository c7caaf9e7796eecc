"""One quantity of a result as the findings read it: at the last time that is trusted."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr

from nipc.answers.wording import number

KIND_WORDS = {"noise": "the noise source", "parameter": "the parameter"}


@dataclass(frozen=True)
class Trust:
    """Up to which output time figures are stated, and how that is said."""

    index: int
    clause: str
    confirmed: bool


class View:
    """One quantity's part of a dataset; what is not there reads as NaN."""

    def __init__(self, dataset: xr.Dataset, name: str) -> None:
        self.dataset = dataset
        self.data = dataset.sel(quantity=name)
        self.name = name
        self.unit = str(self.data["quantity_unit"].item()) if "quantity_unit" in self.data else ""
        self.clock = clock_of(dataset)
        self.times = np.asarray(dataset["time"].values, float)
        self.trust = trust_of(dataset, self.data)

    @property
    def unconfirmed(self) -> str:
        """A mark for what is said of the end of the horizon, where that is not trusted."""
        whole = self.trust.confirmed and self.trust.index == self.times.size - 1
        return "" if whole else " (this is of the end of the horizon, and not confirmed)"

    @property
    def when(self) -> str:
        """The time of which figures are stated."""
        return f"{number(float(self.times[self.trust.index]))} {self.clock}".strip()

    def value(self, variable: str, **labels: Any) -> float:
        """A number at the trusted time, at labels; NaN where the result has none."""
        if variable not in self.data:
            return float("nan")
        array = self.data[variable]
        if "time" in array.dims:
            array = array.isel(time=self.trust.index)
        return float(array.sel(**labels).item()) if labels else float(array.item())

    def triple(self, variable: str, **labels: Any) -> tuple[float, float, float]:
        """(value, low, high)."""
        return (
            self.value(variable, **labels),
            self.value(f"{variable}_low", **labels),
            self.value(f"{variable}_high", **labels),
        )

    def kind(self, source: str) -> str:
        """noise, start or parameter."""
        if "source_kind" not in self.data.coords:
            return "noise"
        return str(self.data["source_kind"].sel(source=source).item())

    def source(self, name: str) -> str:
        """`the noise source 'thrust'`."""
        kind = self.kind(name)
        if kind == "start":
            return "the uncertain start"
        return f"{KIND_WORDS.get(kind, 'the source')} {name!r}"

    def ranked(self, variable: str) -> list[tuple[str, float]]:
        """Sources by a share at the trusted time, largest first."""
        if variable not in self.data:
            return []
        pairs = [(str(s), self.value(variable, source=s)) for s in self.data["source"].values]
        return sorted((p for p in pairs if np.isfinite(p[1])), key=lambda p: -p[1])


def clock_of(dataset: xr.Dataset) -> str:
    """The unit of time."""
    return str(dataset["time"].attrs.get("units", dataset.attrs.get("time_unit", "")))


def trust_of(dataset: xr.Dataset, part: xr.Dataset) -> Trust:
    """Of one quantity's `part`: of its distribution where that is judged, else of its paths."""
    times = np.asarray(dataset["time"].values, float)
    clock, last = clock_of(dataset), times.size - 1
    paths = float(part["trust_horizon"].item()) if "trust_horizon" in part else np.nan
    spread = paths
    if "trust_horizon_distribution" in part:
        spread = float(part["trust_horizon_distribution"].item())
        spread = paths if np.isnan(spread) else max(spread, paths)
    if np.isnan(spread):
        return Trust(last, "[not checked against direct runs: no trust horizon]", False)
    index = int(np.searchsorted(times, spread * (1.0 + 1e-12), side="right")) - 1
    if index < 0 or spread <= times[0]:
        return Trust(0, "[trust horizon: none]", False)
    whole = index == last
    clause = f"trust horizon {number(spread)} {clock}"
    clause += ", the whole study" if whole else f" of {number(float(times[-1]))} {clock}"
    if paths < spread:
        clause += f"; for single paths {number(paths)} {clock}"
    return Trust(index, f"[{clause}]", True)
