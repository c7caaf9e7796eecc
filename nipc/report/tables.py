"""The page's smaller tables: values over time, exits, allowances, arcs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr

from nipc.arrays import FloatArray
from nipc.report import reading
from nipc.report.numbers import (
    amount,
    beside,
    interval,
    number,
    percent,
    pretty_unit,
    probability,
    squared,
)

MOMENTS = 9


@dataclass(frozen=True)
class Table:
    """Heads and rows of text; the first cell of a row is its head."""

    caption: str
    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]


def moments(dataset: xr.Dataset, quantity: str) -> Table:
    """A quantity's answers at some times, for those who read numbers or no figures at all."""
    times, trust = reading.times(dataset), reading.trust(dataset, quantity)
    picks = np.unique(np.linspace(0, len(times) - 1, min(MOMENTS, len(times))).round().astype(int))
    found: list[tuple[str, list[str]]] = []
    std = reading.series(dataset, "std", quantity)
    spread = np.full(len(times), np.nan) if std is None else std
    mean = reading.series(dataset, "mean", quantity)
    if mean is not None:
        found.append(("mean", [beside(mean[i], spread[i]) for i in picks]))
    if std is not None:
        found.append(("std", [beside(std[i], std[i]) for i in picks]))
    for level in (0.025, 0.975):
        values = reading.quantile(dataset, level, quantity)
        if values is not None:
            found.append((f"{100 * level:g} %", [beside(values[i], spread[i]) for i in picks]))
    for name, head in (("inside_probability", "inside"), ("survival_probability", "all the time")):
        values = reading.series(dataset, name, quantity)
        if values is not None:
            found.append((f"P({head})", [probability(values[i]) for i in picks]))
    shares = reading.shares(dataset, "driver_total", quantity)
    if shares is not None:
        names, unknown = reading.sources(dataset), reading.unknown_shares(dataset, quantity)
        told = ["not known" if unknown[i] else _leader(shares[:, i], names) for i in picks]
        found.append(("main driver", told))
    unit = reading.time_unit(dataset)
    heads = (f"time ({unit})" if unit else "time", *(head for head, _ in found))
    rows = tuple(
        (
            f"{number(times[i], 4)}\u202f{trust.mark(times[i])}".rstrip(),
            *(column[row] for _, column in found),
        )
        for row, i in enumerate(picks)
    )
    q_unit = reading.unit(dataset, quantity)
    return Table(quantity + (f", in {q_unit}" if q_unit else ""), heads, rows)


def _leader(shares: np.ndarray, names: list[str]) -> str:
    if np.isnan(shares).all():
        return "–"
    index = int(np.nanargmax(shares))
    return f"{names[index]} {percent(min(float(shares[index]), 1.0))}"


def _marked(dataset: xr.Dataset, quantity: str) -> str:
    """A quantity, marked when what is said of the end lies past its trust horizon."""
    trust = reading.trust(dataset, quantity)
    return f"{quantity}\u202f{trust.mark(trust.end)}".rstrip()


def joint_boxes(dataset: xr.Dataset) -> Table | None:
    """Boxes of several quantities at the end."""
    rows = []
    mark = reading.trust(dataset, None).mark(float(reading.times(dataset)[-1]))
    for joint in reading.joints(dataset):
        cells = []
        for name in ("joint_inside_probability", "joint_survival_probability"):
            ends = (
                reading.joint_series(dataset, name + side, joint) for side in ("", "_low", "_high")
            )
            value, low, high = (np.nan if end is None else float(end[-1]) for end in ends)
            known = f" ({interval(low, high)})" if np.isfinite(low + high) else ""
            cells.append(probability(value) + known)
        rows.append((f"{joint}\u202f{mark}".rstrip(), *cells))
    heads = ("joint box", "inside at the end", "inside all the time")
    return Table("All quantities of a joint box at once", heads, tuple(rows)) if rows else None


def _at_end(series: FloatArray | None) -> float:
    return float("nan") if series is None else float(series[-1])


def laws(dataset: xr.Dataset) -> Table | None:
    """How each quantity spreads, and why that is said."""
    if "spreading_verdict" not in dataset:
        return None
    rows, clock = [], reading.time_unit(dataset)
    for quantity in reading.quantities(dataset):
        exponent = _estimate(dataset, "diffusion_exponent", quantity)
        coefficient = _estimate(dataset, "diffusion_coefficient", quantity)
        unit = squared(reading.unit(dataset, quantity))
        per = f" {unit} per {clock or 'unit of time'}".replace("  ", " ")
        if reading.text(dataset, "spreading_verdict", quantity) != "diffusive":
            per += "^α"
        per = per if coefficient != "–" else ""
        rows.append(
            (
                quantity,
                reading.text(dataset, "spreading_verdict", quantity) or "–",
                exponent,
                coefficient + per,
                _evidence(dataset, quantity),
            )
        )
    heads = ("quantity", "spreading", "exponent α", "coefficient D", "evidence")
    # what is past the trust horizon has no part in the law, so it bears no mark
    caption = "Law of spreading within the trust horizon, Var = A + 2 D t^α"
    return Table(caption, heads, tuple(rows))


def _evidence(dataset: xr.Dataset, quantity: str) -> str:
    """Why, and of what where the law is not of the quantity as it is."""
    why = reading.text(dataset, "spreading_evidence", quantity) or "–"
    subject = reading.text(dataset, "spreading_of", quantity)
    return f"{subject}: {why}" if subject else why


def _estimate(dataset: xr.Dataset, name: str, quantity: str) -> str:
    value, low, high = (
        reading.scalar(dataset, name + side, quantity) for side in ("", "_low", "_high")
    )
    known = f" ({number(low, 3)} to {number(high, 3)})" if np.isfinite(low + high) else ""
    return number(value, 3) + known


def exits(dataset: xr.Dataset) -> Table | None:
    """When members leave: quantiles of the exit time, and who drives the leaving."""
    boxed = [q for q in reading.quantities(dataset) if reading.box(dataset, q) is not None]
    if not boxed or not reading.has(dataset, "exit_time_quantile"):
        return None
    levels, unit = np.asarray(dataset["level"].values, float), reading.time_unit(dataset)
    rows = []
    for quantity in boxed:
        times = reading.series(dataset, "exit_time_quantile", quantity)
        if times is None:
            continue
        trust = reading.trust(dataset, quantity)
        late = trust.mark(trust.end)
        cells = [
            "–" if np.isnan(t) else amount(t, unit, 3) + trust.mark(t) if t < np.inf
            else "later" + late
            for t in times
        ]  # fmt: skip
        driver = reading.series(dataset, "exit_driver_total", quantity)
        leader = "–" if driver is None else _leader(driver, reading.sources(dataset))
        ends = [
            reading.series(dataset, f"exit_driver_total_{end}", quantity) for end in ("low", "high")
        ]
        if ends[0] is not None and ends[1] is not None:
            wide = np.nan_to_num(ends[1] - ends[0]).max() > reading.WIDE
            leader = "not known" if wide and leader != "–" else leader
        rows.append((quantity, *cells, leader + (late if leader != "–" else "")))
    heads = (
        "quantity",
        *(f"{100 * level:g} % have left by" for level in levels),
        "leaving is driven by",
    )
    caption = "When members leave their box; later: not within the horizon"
    return Table(caption, heads, tuple(rows)) if rows else None


def allowances(dataset: xr.Dataset) -> Table | None:
    """The largest intensity of each source that still keeps each box."""
    boxed = [q for q in reading.quantities(dataset) if reading.box(dataset, q) is not None]
    if not boxed or not reading.has(dataset, "allowance"):
        return None
    rows = []
    for index, source in enumerate(reading.sources(dataset)):
        part = dataset.isel(source=index)
        unit = str(part["source_unit"].item()) if "source_unit" in part.coords else ""
        cells = [_allowed(part, reading.position(dataset, q), pretty_unit(unit)) for q in boxed]
        rows.append((source, *cells))
    asked = dataset["allowance"].attrs
    goal = "that keeps the box"
    if "target" in asked:
        event = "in the box at the end"
        if asked.get("event") == "survival":
            event = "in the box all the time"
        goal = f"with P({event}) at {number(float(asked['target']))} or above"
    caption = f"Largest intensity {goal} (of start and parameters: scale), others fixed"
    return Table(caption, ("source", *(_marked(dataset, q) for q in boxed)), tuple(rows))


def _allowed(part: xr.Dataset, quantity: int, unit: str) -> str:
    """A source's allowance for a quantity's box."""
    ends = [
        float(part[name].isel(quantity=quantity)) if name in part else np.nan
        for name in ("allowance", "allowance_low", "allowance_high", "allowance_limit")
    ]
    value, low, high, limit = ends
    if np.isinf(value):
        return "no limit found" if np.isnan(limit) else f"more than × {number(limit, 2)}"
    if np.isnan(value):
        return "–" if np.isnan(limit) else "not by it alone"
    known = f" ({number(low, 3)} to {number(high, 3)})" if np.isfinite(low + high) else ""
    return f"{number(value, 3)}{known} {unit}".rstrip()


def arcs(dataset: xr.Dataset) -> Table | None:
    """Every arc of the chain."""
    if not (reading.has(dataset, "arc_start") and reading.has(dataset, "arc_end")):
        return None
    wanted = {
        "arc_start": "from",
        "arc_end": "to",
        "arc_degree": "degree",
        "arc_terms": "terms",
        "arc_runs": "runs",
        "arc_failed": "failed",
        "arc_error": "error",
        "arc_note": "note",
    }
    held = [name for name in wanted if name in dataset]
    digits = {"arc_error": 2, "arc_start": 5, "arc_end": 5}
    rows = []
    for index in range(dataset.sizes["arc"]):
        cells = [str(index + 1)]
        for name in held:
            value = dataset[name].values[index]
            text = str(value) if name == "arc_note" else number(float(value), digits.get(name, 4))
            cells.append(text)
        rows.append(tuple(cells))
    return Table("Arcs", ("arc", *(wanted[name] for name in held)), tuple(rows))
