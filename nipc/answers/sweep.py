"""A sweep of intensities from one study: the answers at each scale, and the orders of noise."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import xarray as xr

from nipc.answers.orders import Orders, orders_in
from nipc.answers.scaled import Scaled
from nipc.answers.whatif import LOST, MARKED, what_if
from nipc.answers.wording import number
from nipc.arrays import BoolArray
from nipc.errors import InputError

SHOWN = 3  # orders 0, 1, 2


def moved_groups(scaled: Scaled, sources: Sequence[str]) -> BoolArray:
    """(G,) which groups a sweep scales: those named, or all noise sources."""
    if not sources:
        moved = np.array([group.kind == "noise" for group in scaled.groups], dtype=bool)
        if not moved.any():
            raise InputError("the study has no noise source; name the start or a parameter")
        return moved
    for name in sources:
        if name not in scaled.names:
            known = ", ".join(scaled.names) or "none"
            raise InputError(f"nothing is called {name!r} that could be swept; there are: {known}")
    return np.array([name in sources for name in scaled.names], dtype=bool)


def sweep(
    scaled: Scaled,
    factors: Sequence[float],
    sources: Sequence[str] = (),
    members: int | None = None,
) -> xr.Dataset:
    """Answers at each of `factors` (F,), in dimension `factor`, and contributions by order.

    As in results.nc, with `factor` before the other dimensions; `far_share` (factor) members that
    passed outside what the runs cover; `order_mean`, `order_std` (order, quantity, time) the
    contributions of orders 0, 1, 2 at factor 1; `beyond_linear` (factor, quantity, time) the size
    of all orders from two upwards over the standard deviation.
    """
    if not factors:
        raise InputError("a sweep needs at least one scale")
    for factor in factors:
        if not (np.isfinite(factor) and factor >= 0.0):
            raise InputError(f"scale {factor:g} is not a number from 0 upwards")
    moved = moved_groups(scaled, sources)
    found = [
        what_if(scaled, np.where(moved, factor, 1.0), members=members, shares=False)
        for factor in factors
    ]
    at = xr.Variable("factor", list(factors), {"long_name": "common factor of the sources moved"})
    data = xr.concat([one.drop_vars("scale") for one in found], at, data_vars="all")
    far = [float(one.attrs["far_share"]) for one in found]
    data["far_share"] = ("factor", far, {"units": "1", "long_name": "share of far members"})
    _add_orders(data, orders_in(scaled, moved), list(factors))
    data.attrs = {
        "title": scaled.study.title,
        "moved": ", ".join(n for n, m in zip(scaled.names, moved, strict=True) if m),
        "tolerance": scaled.study.tolerance,
        "members": found[0].attrs["members"],
        "check_error": float(np.nanmax(scaled.check_error, initial=0.0)),
    }
    return data


def _add_orders(data: xr.Dataset, orders: Orders, factors: list[float]) -> None:
    shown = range(min(SHOWN, len(orders.parts)))
    dims = ("order", "quantity", "time")
    for name, of in (("mean", orders.mean), ("std", orders.std)):
        values = np.stack([of(k).T for k in shown])
        words = {"mean": "mean", "std": "standard deviation"}[name]
        attributes = {
            "units": "as the quantity",
            "long_name": f"{words} of each order's contribution at factor 1",
        }
        data[f"order_{name}"] = (dims, values, attributes)
    beyond = np.stack([orders.beyond_linear(factor).T for factor in factors])
    attributes = {
        "units": "1",
        "long_name": "root mean square of orders 2 and more over the standard deviation",
    }
    data["beyond_linear"] = (("factor", "quantity", "time"), beyond, attributes)


def remarks(data: xr.Dataset) -> list[str]:
    """Where the small-noise picture ends, what is extrapolated, and what the sweep may be off."""
    said = []
    tolerance = float(data.attrs["tolerance"])
    for name in data["quantity"].values:
        last = data["beyond_linear"].sel(quantity=name).isel(time=-1).values
        over = np.flatnonzero(last > tolerance)
        if over.size:
            first = int(over[0])
            said.append(
                f"{name}: from scale {number(float(data['factor'].values[first]))} on, parts of "
                f"second and higher order in the noise make {last[first]:.1%} of the spread and "
                f"more, above the tolerance of {tolerance:.1%}: the small-noise (linear) picture "
                "is not enough."
            )
    far = data["far_share"].values
    factors = data["factor"].values
    for low, high, words in (
        (LOST, 1.1, "more than half of the members pass outside what the runs cover: a guess"),
        (MARKED, LOST, "members pass outside what the runs cover and are extrapolated there"),
    ):
        there = [f"{number(float(s))} ({p:.0%})" for s, p in zip(factors, far, strict=True)
                 if low < p <= high]  # fmt: skip
        if there:
            said.append(f"At scale {', '.join(there)}: {words}.")
    said.append(
        f"At scale 1 held-out paths were off by at most {data.attrs['check_error']:.2%} of the "
        "spread; at other scales nothing was run."
    )
    return said
