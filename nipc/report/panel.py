"""What-if inside the page: member value = sum over terms of prod_j s_j^p_tj x contribution.

The page keeps the contributions of some members, order by order in the scales s of the sources, as
16-bit numbers, and answers from them in the browser. `answer` is the same arithmetic in Python:
what the page is tested against. `nipc whatif` is the reference for both, since it uses the whole
ensemble and the whole chain.
"""

from __future__ import annotations

import base64
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import xarray as xr

from nipc.arrays import FloatArray, IntArray
from nipc.report import reading
from nipc.report.numbers import number, percent

BYTES = 2_100_000
"""Most bytes of contributions in a page; base64 makes them a third more."""
FEWEST = 150
LEVELS = (0.025, 0.25, 0.5, 0.75, 0.975)
RANGE = (0.0, 2.0)
STEPS = 32767
ROUGH = 0.1  # of the spread: members that are off by more are told apart


@dataclass(frozen=True)
class Panel:
    """The panel's ensemble: `terms` (term, member, quantity, time), `powers` (term, source)."""

    terms: FloatArray
    powers: IntArray
    times: FloatArray
    left_out: int


@dataclass(frozen=True)
class Answer:
    """Quantiles (level, time), inside probability (time,), shares (source, time) of a quantity."""

    quantiles: FloatArray
    mean: FloatArray
    std: FloatArray
    inside: FloatArray
    first: FloatArray
    total: FloatArray


def read(dataset: xr.Dataset) -> Panel | None:
    """The panel's ensemble, cut to what fits in a page; None when the result keeps none.

    Members that have no finite value at some time are left out, and counted.
    """
    if "panel_contribution" not in dataset or "panel_power" not in dataset:
        return None
    order = ("panel_term", "panel_member", "quantity", "panel_time")
    terms = np.asarray(dataset["panel_contribution"].transpose(*order).values, float)
    powers = dataset["panel_power"].transpose("panel_term", "source").values.astype(np.int64)
    times = np.asarray(dataset["panel_time"].values, float)
    whole = np.isfinite(terms).all(axis=(0, 2, 3))
    if whole.sum() < 2:
        return None
    panel = Panel(terms[:, whole], powers, times, int((~whole).sum()))
    return _fitted(panel)


def _fitted(panel: Panel) -> Panel:
    """Fewer members, then fewer times, until the page stays small."""
    terms, members, quantities, times = panel.terms.shape
    most = max(BYTES // (2 * terms * quantities * times), FEWEST)
    if members > most:
        panel = replace(panel, terms=panel.terms[:, :most])
    most_times = max(BYTES // (2 * terms * quantities * panel.terms.shape[1]), 2)
    if times > most_times:
        kept = np.unique(np.linspace(0, times - 1, most_times).round().astype(int))
        panel = replace(panel, terms=panel.terms[..., kept], times=panel.times[kept])
    return panel


def answer(
    panel: Panel, scales: FloatArray, quantity: int, low: float = -np.inf, high: float = np.inf
) -> Answer:
    """What the panel says at these scales (source,), for one quantity and a box.

    Shares: terms in which the same sources take part make one part of the variance; a source's
    first share is its own part, its total share every part that it takes part in, over the sum of
    the parts. Exact when the parts are uncorrelated, as they are up to second order in the scales.
    """
    weights = np.prod(np.asarray(scales, float) ** panel.powers, axis=1)
    parts = weights[:, None, None] * panel.terms[:, :, quantity]
    values = parts.sum(axis=0)
    takes = panel.powers > 0
    supports = np.unique(takes[takes.any(axis=1)], axis=0)
    variances = (
        np.stack(
            [parts[(takes == support).all(axis=1)].sum(axis=0).var(axis=0) for support in supports]
        )
        if len(supports)
        else np.zeros((0, len(panel.times)))
    )
    whole = variances.sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        share = variances / whole
    alone = supports.sum(axis=1) == 1
    count = panel.powers.shape[1]
    first = np.stack([share[alone & supports[:, j]].sum(axis=0) for j in range(count)])
    total = np.stack([share[supports[:, j]].sum(axis=0) for j in range(count)])
    undefined = ~(whole > 0)
    first[:, undefined], total[:, undefined] = np.nan, np.nan
    return Answer(
        np.quantile(values, LEVELS, axis=0),
        values.mean(axis=0),
        values.std(axis=0),
        ((values >= low) & (values <= high)).mean(axis=0),
        first,
        total,
    )


def stored(dataset: xr.Dataset) -> dict[str, Any] | None:
    """The panel as it is kept in the page: offsets, steps and 16-bit numbers, little-endian."""
    panel = read(dataset)
    if panel is None:
        return None
    low, high = panel.terms.min(axis=1), panel.terms.max(axis=1)
    middle, step = 0.5 * (low + high), (high - low) / (2 * STEPS)
    spread = step.max(axis=2) > 0  # (term, quantity)
    blocks = []
    for term, quantity in np.argwhere(spread):
        part = panel.terms[term, :, quantity].T - middle[term, quantity][:, None]
        steps = np.where(step[term, quantity] > 0, step[term, quantity], 1.0)[:, None]
        blocks.append(np.rint(part / steps).astype("<i2"))
    blob = np.concatenate([block.ravel() for block in blocks]) if blocks else np.zeros(0, "<i2")
    names = reading.quantities(dataset)
    return {
        "times": panel.times.tolist(),
        "unit": reading.time_unit(dataset),
        "members": panel.terms.shape[1],
        "sources": reading.sources(dataset),
        "ranges": _ranges(dataset),
        "powers": panel.powers.tolist(),
        "levels": list(LEVELS),
        "quantities": [_quantity(dataset, name) for name in names],
        "spread": spread.tolist(),
        "offset": [float(f"{v:.12g}") for v in middle.ravel()],
        "step": [float(f"{v:.9g}") for v in step.ravel()],
        "blob": base64.b64encode(blob.tobytes()).decode("ascii"),
    }


def _quantity(dataset: xr.Dataset, name: str) -> dict[str, Any]:
    box, trust = reading.box(dataset, name), reading.trust(dataset, name)
    return {
        "name": name,
        "unit": reading.unit(dataset, name),
        "low": box.low if box is not None and np.isfinite(box.low) else None,
        "high": box.high if box is not None and np.isfinite(box.high) else None,
        "paths": trust.paths if np.isfinite(trust.paths) else None,
        "distribution": trust.distribution if np.isfinite(trust.distribution) else None,
    }


def _ranges(dataset: xr.Dataset) -> list[list[float]]:
    """The scales within which each source may be moved."""
    ends = []
    for side, default in zip(("low", "high"), RANGE, strict=True):
        name = f"panel_scale_{side}"
        values = dataset[name].values if name in dataset else [default] * dataset.sizes["source"]
        ends.append([float(v) if np.isfinite(v) else default for v in values])
    return [list(pair) for pair in zip(*ends, strict=True)]


def remarks(dataset: xr.Dataset) -> list[str]:
    """How the panel's answers are made, and by how much they differ from the page's own."""
    panel = read(dataset)
    if panel is None:
        return []
    members, order = panel.terms.shape[1], int(panel.powers.sum(axis=1).max())
    said = [
        f"Answered in the browser from {members} members at {len(panel.times)} times"
        f"{_phase(dataset)}, by their "
        f"contributions up to order {order} in the scales. A probability of one half is known to "
        f"± {number(1.96 * 0.5 / members**0.5, 2)} from so many members (95 %), the standard "
        f"deviation to ± {percent(1.96 / (2 * members) ** 0.5)}.",
        "Driver shares are split by which sources take part in a contribution; that is exact up to "
        "second order in the scales, apart from sampling.",
    ]
    gap = _gap(dataset, panel)
    if np.isfinite(gap):
        said.append(
            f"With every scale at 1 its standard deviations differ from those above by "
            f"{_at_most(gap)}."
        )
    said += _error(dataset)[1]
    if panel.left_out:
        said.append(f"{panel.left_out} members that ended early are not in it.")
    said.append(
        "The command nipc whatif is the reference: it uses the whole ensemble and the "
        "whole chain, and also gives survival."
    )
    return said


def first(dataset: xr.Dataset) -> int:
    """The quantity that is asked about first: one that has a box, where there is any."""
    boxed = [reading.box(dataset, name) is not None for name in reading.quantities(dataset)]
    return boxed.index(True) if True in boxed else 0


def warning(dataset: xr.Dataset) -> str:
    """What must be known before the panel is used; empty where there is nothing."""
    return _error(dataset)[0]


def _error(dataset: xr.Dataset) -> tuple[str, list[str]]:
    """How far members are off at other scales: of which quantities much, and of the others."""
    if not reading.has(dataset, "panel_error"):
        return "", []
    tried = dataset["panel_error"].transpose(..., "quantity").values
    worst = np.nanmax(tried.reshape(-1, dataset.sizes["quantity"]), axis=0, initial=0.0)
    far = [
        f"{name} ({percent(w) if w < 1 else number(float(w), 2) + ' times'})"
        for name, w in zip(reading.quantities(dataset), worst, strict=True)
        if w > ROUGH
    ]
    good = worst[worst <= ROUGH]
    words = "At other scales, members differ from the chain itself by "
    warned = ""
    if far:
        warned = f"{words}much of the spread, so do not rely on the panel there: {', '.join(far)}."
        words = "Of the other quantities they differ by "
    if not good.size:
        return warned, []
    return warned, [f"{words}{_at_most(float(good.max()))} of the spread where this was tried."]


def _phase(dataset: xr.Dataset) -> str:
    """What is not drawn between the times, if anything."""
    words = str(dataset["panel_time"].attrs.get("long_name", ""))
    return (
        " (all at one phase of the period, so its oscillation is not drawn)"
        if ("phase" in words)
        else ""
    )


def _at_most(share: float) -> str:
    return "less than 0.5\u202f%" if share < 0.005 else f"at most {percent(share)}"


def _gap(dataset: xr.Dataset, panel: Panel) -> float:
    """Largest relative difference in standard deviation between the panel and the result."""
    if "std" not in dataset:
        return float("nan")
    times, worst = reading.times(dataset), float("nan")
    scales = np.ones(panel.powers.shape[1])
    for index, name in enumerate(reading.quantities(dataset)):
        std = reading.series(dataset, "std", name)
        if std is None or not np.nanmax(std) > 0:
            continue
        expected = np.interp(panel.times, times, std)
        there = expected > 1e-3 * np.nanmax(std)
        found = answer(panel, scales, index).std
        if there.any():
            gap = float(np.max(np.abs(found[there] / expected[there] - 1.0)))
            worst = float(np.fmax(worst, gap))
    return worst
