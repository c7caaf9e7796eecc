"""The labelled data of a result: which variables there are, with their dimensions and units."""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import xarray as xr

from nipc.answers.intervals import Interval
from nipc.arrays import FloatArray
from nipc.problem.study import Study

LEVELS = (0.025, 0.25, 0.5, 0.75, 0.975)


@dataclass
class ResultTable:
    """Gathers the variables of `results.nc`; arrays come as (T, Q) and are stored (quantity, time).

    `drivers` are (name, kind) of each source of spread; `attributes` are kept as JSON; `notes` are
    sentences on how the answers were found.
    """

    study: Study
    drivers: tuple[tuple[str, str], ...]
    variables: dict[str, Any] = field(default_factory=dict)
    attributes: dict[str, Any] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)

    def add(
        self, name: str, dims: tuple[str, ...], values: Any, units: str, long_name: str
    ) -> None:
        """A variable with its unit and a plain name."""
        attributes = {"units": units, "long_name": long_name}
        self.variables[name] = (dims, np.asarray(values), attributes)

    def over_time(
        self,
        name: str,
        values: FloatArray,
        units: str,
        long_name: str,
        interval: Interval | None = None,
        dim: str = "quantity",
    ) -> None:
        """A variable (T, Q), with its 95 % interval where there is one."""
        self.add(name, (dim, "time"), np.swapaxes(values, -1, -2), units, long_name)
        self._interval(name, (dim, "time"), interval, units, long_name, swap=True)

    def by_driver(
        self, name: str, values: FloatArray, long_name: str, interval: Interval | None = None
    ) -> None:
        """A variable (G, T, Q), with its 95 % interval where there is one."""
        dims = ("source", "quantity", "time")
        self.add(name, dims, np.swapaxes(values, -1, -2), "1", long_name)
        self._interval(name, dims, interval, "1", long_name, swap=True)

    def by_quantity(
        self,
        name: str,
        values: Any,
        units: str,
        long_name: str,
        interval: Interval | None = None,
    ) -> None:
        """A variable (Q,), with its 95 % interval where there is one."""
        self.add(name, ("quantity",), values, units, long_name)
        self._interval(name, ("quantity",), interval, units, long_name, swap=False)

    def _interval(
        self,
        name: str,
        dims: tuple[str, ...],
        interval: Interval | None,
        units: str,
        long_name: str,
        swap: bool,
    ) -> None:
        if interval is None:
            return
        for end in ("low", "high"):
            values = getattr(interval, end)
            values = np.swapaxes(values, -1, -2) if swap else values
            label = f"{long_name}, {end} end of its 95 % interval"
            self.add(f"{name}_{end}", dims, values, units, label)

    def dataset(self, attributes: dict[str, Any]) -> xr.Dataset:
        """The finished, labelled data."""
        study = self.study
        coords: dict[str, Any] = {
            "time": (
                "time",
                study.clock.times,
                {"units": study.clock.unit, "long_name": "time"},
            ),
            "quantity": ("quantity", [q.name for q in study.quantity]),
            "quantity_unit": ("quantity", [q.unit for q in study.quantity]),
            "source": ("source", [name for name, _ in self.drivers]),
            "source_kind": ("source", [kind for _, kind in self.drivers]),
            "level": ("level", list(LEVELS)),
        }
        if study.joint_box:
            coords["joint"] = ("joint", [box.name for box in study.joint_box])
        own = {name: json.dumps(value) for name, value in self.attributes.items()}
        return xr.Dataset(self.variables, coords=coords, attrs=own | attributes)
