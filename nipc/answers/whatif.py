"""What becomes of the answers when sources are scaled or boxes moved: no run is made.

Intervals hold the ensemble's chance and the error of paths. That error was measured with every
scale at 1; it is taken to grow as the largest scale, and beyond 1 as its square, which is how the
first order that a linear expansion leaves out grows. Members that scales beyond one take outside
what the runs cover are held to be off by half of the spread each, the mean and the spread without
them are held possible, and so is any side of a box for them.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import xarray as xr

from nipc.answers import present
from nipc.answers.boxes import check_start
from nipc.answers.confinement import Confinement
from nipc.answers.drivers import PickFreezeAccumulator
from nipc.answers.ensemble import boxes_of
from nipc.answers.intervals import Interval, normal_factor
from nipc.answers.moments import MomentAccumulator
from nipc.answers.outside import DoubtfulConfinement
from nipc.answers.quantiles import QuantileAccumulator
from nipc.answers.scaled import ALL, Scaled
from nipc.answers.table import LEVELS, ResultTable
from nipc.arrays import FloatArray
from nipc.chain.history import blocks_of
from nipc.errors import InputError
from nipc.problem.study import Study

SHARE_MEMBERS = 8192
"""Members of the pick-and-freeze shares: their standard error is then some 0.01."""

MARKED, LOST = 0.02, 0.5
"""Shares of far members above which an answer is marked, and above which it is no answer."""

Ends = tuple[float, float]


LOOK = 1024  # members that tell how many of them scales take outside
OFF = 0.5  # of the spread, by which a member outside what the runs cover is held to be off


def grown_error(scaled: Scaled, scales: FloatArray) -> FloatArray:
    """(T, Q) error of paths within what the runs cover; zero where it was not measured."""
    largest = float(np.max(scales, initial=0.0))
    return np.nan_to_num(scaled.path_error) * largest * max(1.0, largest)


def path_error(scaled: Scaled, scales: FloatArray) -> FloatArray:
    """(T, Q) root-mean-square error of all members' paths, those far outside among them."""
    error = grown_error(scaled, scales)
    if np.max(scales, initial=0.0) <= 1.0:
        return error
    some = scaled.members(scales, 0, min(LOOK, scaled.study.ensemble.members))
    std = np.nan_to_num(present.std(some))
    return np.asarray(np.hypot(error, OFF * math.sqrt(scaled.far) * std))


def moved(study: Study, boxes: Mapping[str, Ends]) -> Study:
    """The study with other boxes; InputError for a quantity there is not, or an empty interval."""
    names = [q.name for q in study.quantity]
    for name, (low, high) in boxes.items():
        if name not in names:
            known = ", ".join(names)
            raise InputError(f"no quantity is called {name!r}; there are: {known}")
        if math.isnan(low) or math.isnan(high) or not low < high:
            raise InputError(f"box of {name!r}: its low end {low:g} must lie below {high:g}")
    quantities = [
        q.model_copy(update={"box": list(boxes[q.name])}) if q.name in boxes else q
        for q in study.quantity
    ]
    return study.model_copy(update={"quantity": quantities})


@dataclass(frozen=True)
class _Gathered:
    moments: MomentAccumulator
    sure: MomentAccumulator  # without the members outside
    quantiles: QuantileAccumulator
    confinement: Confinement
    far: float


def what_if(
    scaled: Scaled,
    scales: FloatArray,
    boxes: Mapping[str, Ends] | None = None,
    members: int | None = None,
    shares: bool = True,
) -> xr.Dataset:
    """Answers at scales (G,) and moved boxes, named as in results.nc, with 95 % intervals.

    Besides: `scale` (source), and in the attribute `far_share` the share of members that passed
    outside what the runs cover. InputError when a box holds nothing at the start, or when there
    are too few members for the intervals of the quantiles.
    """
    study = moved(scaled.study, boxes or {})
    count = study.ensemble.members if members is None else members
    table = ResultTable(study, tuple((g.name, g.kind) for g in scaled.groups))
    error = path_error(scaled, scales)
    found = _gather(scaled, study, scales, error, count)
    _add_moments(table, scaled, scales, found, error)
    _add_quantiles(table, found, error)
    _add_boxes(table, found.confinement)
    if shares:
        _add_shares(table, scaled, scales, error, min(count, SHARE_MEMBERS))
    table.add("scale", ("source",), scales, "1", "factor of the driver's strength")
    return table.dataset({"far_share": found.far, "members": count, "title": study.title})


def _gather(
    scaled: Scaled, study: Study, scales: FloatArray, error: FloatArray, count: int
) -> _Gathered:
    single, joint = boxes_of(study)
    margin = normal_factor() * error
    confinement = DoubtfulConfinement(scaled.times, [*single, *joint], margin)
    moments, sure, quantiles = MomentAccumulator(), MomentAccumulator(), QuantileAccumulator()
    for values in scaled.blocks(scales, count):
        if not moments.members and np.isfinite(values[:, 0]).any():
            check_start(single, values[:, 0])
        doubted = scaled.doubted(scales)
        confinement.update(values, scaled.ended, doubted)
        moments.update(values)
        quantiles.update(values)
        if doubted is not None:
            sure.update(np.where(doubted[:, None, None], np.nan, values))
    result = scaled.counted(confinement.result())
    return _Gathered(moments, sure, quantiles, result, scaled.far)


def _add_moments(
    table: ResultTable, scaled: Scaled, scales: FloatArray, found: _Gathered, error: FloatArray
) -> None:
    """A path error e independent of the path adds e^2 to the variance; one that is not moves mean
    and standard deviation by up to its mean over the check's members."""
    checked = np.isfinite(scaled.check.direct - scaled.check.predicted).sum(axis=0)
    shift = error / np.sqrt(np.maximum(checked, 1))
    exact = scaled.exact(scales)
    if exact is not None:
        mean, std = exact.mean, np.where(exact.constant, 0.0, exact.std)
        mean_ends, std_ends = Interval(mean, mean), Interval(std, std)
    else:
        mean, std = found.moments.mean, found.moments.std
        mean_ends, std_ends = found.moments.mean_interval(), found.moments.std_interval()
    if found.sure.members and found.far:
        mean_ends = _both(mean_ends, found.sure.mean_interval())
        std_ends = _both(std_ends, found.sure.std_interval())
    unit = "as the quantity"
    ends = Interval(mean_ends.low - shift, mean_ends.high + shift)
    table.over_time("mean", mean, unit, "mean", ends)
    trust = _trusted(scaled, grown_error(scaled, scales), std)
    words = "time up to which path errors, grown with the scales, keep the tolerance"
    table.by_quantity("trust_horizon", trust, scaled.study.clock.unit, words)
    upper = np.sqrt(std_ends.high**2 + error**2) + shift
    ends = Interval(np.maximum(std_ends.low - shift, 0.0), upper)
    table.over_time("std", std, unit, "standard deviation", ends)


def _both(one: Interval, other: Interval) -> Interval:
    """From the lower of the low ends to the higher of the high ones."""
    return Interval(np.fmin(one.low, other.low), np.fmax(one.high, other.high))


def _trusted(scaled: Scaled, error: FloatArray, std: FloatArray) -> FloatArray:
    """(Q,) last output time up to which the error keeps within the tolerance; NaN: none."""
    rounding = 64.0 * np.finfo(float).eps * present.largest(scaled.check.direct)
    good = (error <= scaled.study.tolerance * std) | (error <= rounding)
    good &= np.isfinite(scaled.path_error)
    kept = np.logical_and.accumulate(good, axis=0).sum(axis=0)
    return np.where(kept > 0, scaled.times[np.maximum(kept - 1, 0)], np.nan)


def _add_quantiles(table: ResultTable, found: _Gathered, error: FloatArray) -> None:
    dims, unit = ("level", "quantity", "time"), "as the quantity"
    values = found.quantiles.quantiles(LEVELS)
    ends = [found.quantiles.interval(level) for level in LEVELS]
    slack = normal_factor() * error
    for suffix, array in (
        ("", values),
        ("_low", np.stack([e.low for e in ends]) - slack),
        ("_high", np.stack([e.high for e in ends]) + slack),
    ):
        words = "quantile of the quantity" + (suffix and f", {suffix[1:]} end of its interval")
        table.add(f"quantile{suffix}", dims, np.swapaxes(array, 1, 2), unit, words)


def _add_boxes(table: ResultTable, result: Confinement) -> None:
    study = table.study
    single, joint = boxes_of(study)
    boxed = [box.columns[0] for box in single]
    ends = np.full((2, len(study.quantity)), np.nan)
    for box in single:
        ends[:, box.columns[0]] = box.low[0], box.high[0]
    table.by_quantity("box_low", ends[0], "as the quantity", "low end of the box")
    table.by_quantity("box_high", ends[1], "as the quantity", "high end of the box")

    def spread(values: FloatArray) -> FloatArray:
        full = np.full((result.times.size, len(study.quantity)), np.nan)
        full[:, boxed] = values[: len(boxed)].T
        return full

    for name, value, interval, words in (
        ("inside_probability", result.inside, result.inside_interval, "P(in the box at t)"),
        (
            "survival_probability",
            result.survival,
            result.survival_interval,
            "P(in the box at all output times up to t)",
        ),
    ):
        table.over_time(
            name, spread(value), "1", words, Interval(spread(interval.low), spread(interval.high))
        )
        if joint:
            first = len(single)
            both = Interval(interval.low[first:].T, interval.high[first:].T)
            table.over_time(f"joint_{name}", value[first:].T, "1", words, both, dim="joint")


def _add_shares(
    table: ResultTable, scaled: Scaled, scales: FloatArray, error: FloatArray, count: int
) -> None:
    """Closed form where there is one, else pick and freeze; NaN where nothing varies."""
    exact = scaled.exact(scales)
    if exact is not None:
        columns = [list(group.columns) for group in scaled.groups]
        std = np.where(exact.constant, np.nan, exact.std)
        first, total = exact.first(columns), exact.total(columns)
        doubt = (error / std) ** 2 + 2.0 * error / std / math.sqrt(scaled.check.direct.shape[0])
        ends = [Interval(share - doubt, share + doubt) for share in (first, total)]
    else:
        found = _picked(scaled, scales, count).result()
        first, total = found.first, found.total
        ends = [found.first_interval, found.total_interval]
    for name, values, interval, words in (
        ("driver_first", first, ends[0], "first-order share of the variance"),
        ("driver_total", total, ends[1], "total share of the variance"),
    ):
        clipped = Interval(np.clip(interval.low, 0.0, 1.0), np.clip(interval.high, 0.0, 1.0))
        table.by_driver(name, values, words, clipped)


def _picked(scaled: Scaled, scales: FloatArray, count: int) -> PickFreezeAccumulator:
    shares = PickFreezeAccumulator(scaled.names)
    for block, part in blocks_of(count):

        def mixed(block: int = block, part: int = part) -> Iterator[FloatArray]:
            return (scaled.members(scales, block, part, name) for name in scaled.names)

        a, b = scaled.members(scales, block, part), scaled.members(scales, block, part, ALL)
        shares.update(a, b, mixed())
    return shares


def remarks(dataset: xr.Dataset) -> list[str]:
    """What must be said beside the answers: members far outside, quantities without spread."""
    said = []
    far = float(dataset.attrs["far_share"])
    if far > LOST:
        said.append(
            f"{far:.0%} of the members pass outside what the runs cover, so this is a guess: run a "
            "study with this strength."
        )
    elif far > MARKED:
        said.append(
            f"{far:.1%} of the members pass outside what the runs cover and are extrapolated there."
        )
    still = [
        str(name)
        for name in dataset["quantity"].values
        if float(dataset["std"].sel(quantity=name)[-1]) == 0.0
    ]
    if still:
        said.append(f"{', '.join(still)}: no spread is left, so driver shares are undefined.")
    return said
