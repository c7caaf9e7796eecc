"""A finished study: labelled data, headline figures, findings; what results.nc holds."""

from __future__ import annotations

import json
import os
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from nipc.errors import InputError

HEADLINE = (
    "title",
    "seed",
    "tolerance",
    "propagator_runs",
    "run_equivalents",
    "failed_runs",
    "wall_time",
    "created",
)
DATA, SUMMARY, PAGE = "results.nc", "summary.json", "page.html"


@dataclass(frozen=True, eq=False)
class Result:
    """`dataset` is labelled as the README's table says; `folder` is the study's work folder."""

    dataset: xr.Dataset
    folder: Path

    @property
    def findings(self) -> tuple[str, ...]:
        """The headline findings in plain sentences."""
        return tuple(json.loads(self.dataset.attrs.get("findings", "[]")))

    @property
    def summary(self) -> dict[str, Any]:
        """The headline figures: the state of things at the end of the horizon."""
        data = self.dataset
        last = data.isel(time=-1)
        quantities = {}
        for name in data["quantity"].values:
            entry: dict[str, Any] = {"unit": str(data["quantity_unit"].sel(quantity=name).item())}
            for key, variable in last.data_vars.items():
                if variable.dims == ("quantity",):
                    entry[str(key)] = _plain(variable.sel(quantity=name).item())
                elif variable.dims == ("source", "quantity"):
                    part = variable.sel(quantity=name)
                    entry[str(key)] = {
                        str(s): _plain(part.sel(source=s).item()) for s in data["source"].values
                    }
            quantities[str(name)] = entry
        return {
            **{k: _plain(data.attrs[k]) for k in HEADLINE if k in data.attrs},
            "time": _plain(float(data["time"].values[-1])),
            "time_unit": data.attrs.get("time_unit", ""),
            "findings": list(self.findings),
            "quantities": quantities,
        }

    def save(self) -> None:
        """Write results.nc and summary.json to the work folder, each whole or not at all."""
        self.folder.mkdir(parents=True, exist_ok=True)
        target = self.folder / DATA
        half = target.with_suffix(".part")
        self.dataset.to_netcdf(half, engine="h5netcdf")
        os.replace(half, target)
        text = json.dumps(self.summary, indent=2, allow_nan=False)
        half = self.folder / (SUMMARY + ".part")
        half.write_text(text + "\n", encoding="utf-8")
        os.replace(half, self.folder / SUMMARY)

    @property
    def chain(self) -> ChainView:
        """The arcs as a table: length, degree, terms, runs, held-out error, and why."""
        return ChainView(self.dataset)

    def _repr_html_(self) -> str:
        from nipc.answers.showing import shown

        return shown(self.dataset, self.findings)


@dataclass(frozen=True, eq=False)
class ChainView:
    """The arcs of a result: a table in a notebook, a data set otherwise."""

    result: xr.Dataset

    @property
    def dataset(self) -> xr.Dataset:
        """The variables along `arc`."""
        along = [n for n, v in self.result.data_vars.items() if v.dims == ("arc",)]
        return self.result[along]

    def __len__(self) -> int:
        return int(self.result.sizes.get("arc", 0))

    def _repr_html_(self) -> str:
        from nipc.answers.showing import shown_arcs

        return shown_arcs(self.result)


def load_result(folder: str | Path) -> Result:
    """The result kept in a work folder."""
    folder = Path(folder)
    path = folder / DATA
    if not path.exists():
        raise InputError(f"{path} is not there yet: `nipc run` makes it")
    try:
        with xr.open_dataset(path, engine="h5netcdf") as data:
            return Result(data.load(), folder)
    except (OSError, ValueError) as error:
        raise InputError(f"{path} cannot be read as a result: {error}") from None


def _plain(value: Any) -> Any:
    """JSON has no NaN and no infinity."""
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float):
        if np.isnan(value):
            return None
        if np.isinf(value):
            return "inf" if value > 0 else "-inf"
    return value
