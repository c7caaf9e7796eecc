"""The headline table: what each quantity does, in one row of words and numbers."""

from __future__ import annotations

import re
from dataclasses import dataclass, replace

import numpy as np
import xarray as xr

from nipc.report import reading
from nipc.report.numbers import (
    amount,
    beside,
    interval,
    number,
    percent,
    probability,
    typeset,
    with_spread,
)


@dataclass(frozen=True)
class Cell:
    """A cell: its main text, and a smaller line below."""

    main: str
    note: str = ""
    mark: str = ""


@dataclass(frozen=True)
class Row:
    """One quantity's row; `cells` follow `columns`."""

    quantity: str
    unit: str
    cells: tuple[Cell, ...]


def split(finding: str) -> tuple[str, str]:
    """A finding and the note in brackets that ends it, if one does."""
    found = re.fullmatch(r"(.*\S)\s+\[([^\[\]]*)\]", finding, flags=re.DOTALL)
    return (found[1], found[2]) if found else (finding, "")


@dataclass(frozen=True)
class Group:
    """Findings that follow each other and share their note; `first` is the first one's number."""

    note: str
    first: int
    sentences: tuple[str, ...]


def findings(dataset: xr.Dataset) -> list[Group]:
    """The findings, a note said once for all that follow each other with it."""
    told = [split(str(f)) for f in reading.listed(dataset, "findings") or []]
    groups: list[Group] = []
    for place, (sentence, note) in enumerate(told, 1):
        words = typeset(sentence)
        if groups and groups[-1].note == note:
            groups[-1] = replace(groups[-1], sentences=(*groups[-1].sentences, words))
        else:
            groups.append(Group(note, place, (words,)))
    return groups


def columns(dataset: xr.Dataset) -> list[str]:
    """Heads of the columns that this result can fill."""
    end = amount(float(reading.times(dataset)[-1]), reading.time_unit(dataset), 4)
    heads = [f"mean ± std at {end}"]
    if reading.has(dataset, "inside_probability"):
        heads.append("inside its box at the end")
    if reading.has(dataset, "survival_probability"):
        heads.append("inside all the time")
    if reading.has(dataset, "driver_total") or reading.has(dataset, "driver_first"):
        heads.append("main driver")
    if "spreading_verdict" in dataset:
        heads.append("spreading")
    return [*heads, "trust horizon"]


def rows(dataset: xr.Dataset) -> list[Row]:
    """One row per quantity."""
    return [_row(dataset, quantity) for quantity in reading.quantities(dataset)]


def _row(dataset: xr.Dataset, quantity: str) -> Row:
    unit = reading.unit(dataset, quantity)
    trust = reading.trust(dataset, quantity)
    mark = trust.mark(trust.end)
    mean = with_spread(
        reading.last(dataset, "mean", quantity), reading.last(dataset, "std", quantity)
    )
    cells = [Cell(f"{mean}\u202f{unit}".rstrip(), _range(dataset, quantity), mark)]
    box = reading.box(dataset, quantity)
    for name in ("inside_probability", "survival_probability"):
        if reading.has(dataset, name):
            cells.append(_probability(dataset, name, quantity, box, mark))
    if reading.has(dataset, "driver_total") or reading.has(dataset, "driver_first"):
        driver = reading.main_driver(dataset, quantity)
        cells.append(
            Cell("not known", "the shares' intervals are too wide")
            if driver is None and reading.unknown_shares(dataset, quantity)[-1]
            else Cell("–", "no spread to share out")
            if driver is None
            else Cell(
                driver[0],
                f"{percent(driver[1])} of the variance"
                + (", with what it shares" if driver[2] else ", by itself"),
                mark,
            )
        )
    if "spreading_verdict" in dataset:
        cells.append(_spreading(dataset, quantity))
    cells.append(_trust(dataset, trust))
    return Row(quantity, unit, tuple(cells))


def _range(dataset: xr.Dataset, quantity: str) -> str:
    low, high = (reading.quantile(dataset, level, quantity) for level in (0.025, 0.975))
    if low is None or high is None or not np.isfinite(low[-1] + high[-1]):
        return ""
    std = reading.last(dataset, "std", quantity)
    return f"95 %: {beside(low[-1], std)} to {beside(high[-1], std)}"


def _probability(
    dataset: xr.Dataset, name: str, quantity: str, box: reading.Box | None, mark: str
) -> Cell:
    value = reading.last(dataset, name, quantity)
    if box is None or not np.isfinite(value):
        return Cell("–", "no box" if box is None else "not known")
    low, high = (reading.last(dataset, name + side, quantity) for side in ("_low", "_high"))
    note = interval(low, high) if np.isfinite(low + high) else ""
    return Cell(probability(value), note, mark)


def _spreading(dataset: xr.Dataset, quantity: str) -> Cell:
    verdict = reading.text(dataset, "spreading_verdict", quantity) or "–"
    exponent = reading.scalar(dataset, "diffusion_exponent", quantity)
    low, high = (
        reading.scalar(dataset, "diffusion_exponent" + s, quantity) for s in ("_low", "_high")
    )
    if not np.isfinite(exponent):
        return Cell(verdict)
    note = f"growth exponent {number(exponent, 3)}"
    if np.isfinite(low + high):
        note += f" ({number(low, 3)} to {number(high, 3)})"
    return Cell(verdict, note)


def _trust(dataset: xr.Dataset, trust: reading.Trust) -> Cell:
    unit = reading.time_unit(dataset)
    if not trust.checked:
        return Cell("none", "not checked against direct runs", "‡")
    if not trust.mark(trust.end):
        return Cell(amount(trust.end, unit, 4), "the whole horizon")
    if trust.distribution > trust.paths or not np.isfinite(trust.paths):
        paths = amount(trust.paths, unit, 3) if np.isfinite(trust.paths) else "none"
        return Cell(paths, f"distribution: {amount(trust.distribution, unit, 3)}")
    return Cell(amount(trust.paths, unit, 3), f"of {amount(trust.end, unit, 4)}")


def cost(dataset: xr.Dataset) -> str:
    """What it cost, as far as no finding says so."""
    held = dataset.attrs
    arcs = dataset.sizes.get("arc", 1)
    over = f"{arcs} arcs" if arcs > 1 else ""
    if any(
        str(f).startswith("These answers took") for f in reading.listed(dataset, "findings") or []
    ):
        return over
    parts = []
    if "propagator_runs" in held:
        over = f" over {over}" if over else ""
        parts.append(
            f"{int(held['propagator_runs']):,} runs of the propagator{over}".replace(",", "\u202f")
        )
    if "run_equivalents" in held:
        words = f"{number(float(held['run_equivalents']), 3)} run-equivalents"
        if np.isfinite(float(held.get("budget", np.nan))):
            words += f" of a budget of {number(float(held['budget']), 4)}"
        parts.append(words + " (one is one run over the whole horizon)")
    if int(held.get("failed_runs", 0)):
        parts.append(f"{int(held['failed_runs'])} runs failed")
    return "; ".join(parts) + "." if parts else ""
