"""What an ensemble says: quantiles, inside and survival probability, exit times, some members."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from nipc.answers.boxes import Box, check_start
from nipc.answers.confinement import Confinement, ConfinementAccumulator
from nipc.answers.intervals import Interval
from nipc.answers.moments import MomentAccumulator
from nipc.answers.quantiles import QuantileAccumulator
from nipc.answers.slow import SlowSpreading
from nipc.answers.table import LEVELS, ResultTable
from nipc.arrays import FloatArray, IntArray
from nipc.problem.study import Study

SHOWN = 60  # members whose whole paths are kept
CLOUD, CLOUD_TIMES = 600, 25  # and more of them, at fewer times


def boxes_of(study: Study) -> tuple[list[Box], list[Box]]:
    """The boxes of single quantities and the joint ones."""
    single = {
        q.name: Box.single(q.name, i, q.box[0], q.box[1])
        for i, q in enumerate(study.quantity)
        if q.box is not None
    }
    joint = [Box.joint(j.name, [single[n] for n in j.quantities]) for j in study.joint_box]
    return list(single.values()), joint


def cloud_rows(times: FloatArray) -> IntArray:
    """Which output times a cloud of members is kept at: even steps, the last among them."""
    step = max(1, -(-times.size // CLOUD_TIMES))
    return np.arange(times.size - 1, -1, -step)[::-1]


def add_ensemble(
    table: ResultTable,
    blocks: Iterable[tuple[FloatArray, FloatArray | None]],
    margin: FloatArray,
    trust: FloatArray,
) -> MomentAccumulator:
    """Gather the answers of members given in blocks of (values (n, T, Q), ended (n,) or None).

    `margin` (T, Q) is the 95 % half-width of the path error, which widens the intervals of
    probabilities; `trust` (Q,) is each quantity's trust horizon, up to which the law of its
    spreading is read. Returns the moments.
    """
    study = table.study
    single, joint = boxes_of(study)
    times = study.clock.times
    confinement = ConfinementAccumulator(times, [*single, *joint], np.nan_to_num(margin))
    quantiles, moments = QuantileAccumulator(), MomentAccumulator()
    slow = SlowSpreading(times, [study.clock.period if q.slow else 0.0 for q in study.quantity])
    shown: FloatArray | None = None
    at = cloud_rows(times)
    for values, ended in blocks:
        confinement.update(values, ended)
        quantiles.update(values)
        moments.update(values)
        slow.update(values)
        if shown is None:
            _refuse_empty_boxes(single, values[:, 0])
            shown, cloud = values[:SHOWN].copy(), values[:CLOUD, at]
    assert shown is not None
    names = "quantile of the quantity"
    table.add(
        "quantile",
        ("level", "quantity", "time"),
        np.swapaxes(quantiles.quantiles(LEVELS), 1, 2),
        "as the quantity",
        names,
    )
    table.add(
        "member_quantity",
        ("member", "quantity", "time"),
        np.swapaxes(shown, 1, 2),
        "as the quantity",
        "some members of the ensemble",
    )
    table.add(
        "cloud_quantity",
        ("cloud_member", "quantity", "cloud_time"),
        np.swapaxes(cloud, 1, 2),
        "as the quantity",
        "more members of the ensemble at fewer times",
    )
    clock = {"units": study.clock.unit, "long_name": "time"}
    table.variables["cloud_time"] = (("cloud_time",), times[at], clock)
    result = confinement.result()
    _add_boxes(table, result, [b.columns[0] for b in single])
    if joint:
        _add_joint(table, result, len(single))
    _add_laws(table, slow, trust)
    return moments


def _add_boxes(table: ResultTable, result: Confinement, columns: list[int]) -> None:
    study = table.study
    count, times = len(study.quantity), study.clock.times
    ends = np.full((2, count), np.nan)
    for i, q in enumerate(study.quantity):
        if q.box is not None:
            ends[:, i] = q.box
    table.by_quantity("box_low", ends[0], "as the quantity", "low end of the box")
    table.by_quantity("box_high", ends[1], "as the quantity", "high end of the box")

    def spread(values: FloatArray) -> FloatArray:
        full = np.full((times.size, count), np.nan)
        full[:, columns] = values[: len(columns)].T
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
        ends_ = type(interval)(spread(interval.low), spread(interval.high))
        table.over_time(name, spread(value), "1", words, ends_)
    exit_times, exit_interval = result.exit_quantiles(LEVELS)
    full = np.full((3, len(LEVELS), count), np.nan)
    for k, values in enumerate((exit_times, exit_interval.low, exit_interval.high)):
        full[k][:, columns] = values[:, : len(columns)]
    for suffix, values in zip(("", "_low", "_high"), full, strict=True):
        table.add(
            f"exit_time_quantile{suffix}",
            ("level", "quantity"),
            values,
            study.clock.unit,
            "time by which this share has left the box; infinite when later than the horizon",
        )


def _add_joint(table: ResultTable, result: Confinement, first: int) -> None:
    for name, value, interval, words in (
        ("joint_inside_probability", result.inside, result.inside_interval, "P(in all at t)"),
        (
            "joint_survival_probability",
            result.survival,
            result.survival_interval,
            "P(in all at all output times up to t)",
        ),
    ):
        ends = type(interval)(interval.low[first:].T, interval.high[first:].T)
        table.over_time(name, value[first:].T, "1", words, ends, dim="joint")


def _refuse_empty_boxes(boxes: list[Box], start: FloatArray) -> None:
    if np.isfinite(start).any():
        check_start(boxes, start)


def _add_laws(table: ResultTable, slow: SlowSpreading, trust: FloatArray) -> None:
    """How each slow quantity spreads: verdict, evidence, coefficient and exponent."""
    laws = slow.laws(until=trust)
    table.over_time(
        "slow_std", slow.std(), "as the quantity",
        "square root of the variance whose growth the law describes",
    )  # fmt: skip
    table.by_quantity("spreading_verdict", [law.verdict for law in laws], "", "kind of spreading")
    table.by_quantity("spreading_evidence", [law.reason for law in laws], "", "why")
    subjects = slow.subjects(table.study.clock.unit)
    table.by_quantity("spreading_of", subjects, "", "what the law is of, where not the quantity")
    periods = [np.nan if p is None else p for p in slow.used]
    table.by_quantity("slow_period", periods, table.study.clock.unit, "period averaged over")
    unit = f"as the quantity squared per {table.study.clock.unit}^exponent"
    for name, units, words in (
        ("coefficient", unit, "D in Var = A + 2 D t^exponent"),
        ("exponent", "1", "exponent in Var = A + 2 D t^exponent"),
        ("offset", "as the quantity squared", "A in Var = A + 2 D t^exponent"),
        ("rate", f"1/{table.study.clock.unit}", "lambda in Var ~ exp(2 lambda t)"),
        ("plateau", "as the quantity squared", "variance at which a bounded spread stays"),
    ):
        estimates = [getattr(law, name) for law in laws]
        ends = Interval(np.array([e.low for e in estimates]), np.array([e.high for e in estimates]))
        table.by_quantity(f"diffusion_{name}", [e.value for e in estimates], units, words, ends)
