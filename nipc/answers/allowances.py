"""For each source the largest strength at which each box is still kept, and for all together."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import combinations
from typing import Literal

import numpy as np
import xarray as xr

from nipc.answers.allowance import Allowance, Probability, find_allowance
from nipc.answers.boxes import Box, check_start
from nipc.answers.confinement import Confinement
from nipc.answers.ensemble import boxes_of
from nipc.answers.intervals import normal_factor
from nipc.answers.outside import DoubtfulConfinement
from nipc.answers.scaled import Scaled
from nipc.answers.whatif import LOOK, LOST, path_error
from nipc.answers.wording import number
from nipc.arrays import FloatArray
from nipc.errors import InputError

Event = Literal["inside", "survival"]
MEMBERS = 8192
LIMIT = 8.0
PRECISION = 5e-3
GRID = (0.25, 0.5, 1.0, 2.0)
PAIRS, PAIR_MEMBERS = 3, 2048


@dataclass(frozen=True)
class Question:
    """P(event at the end) >= target for these boxes; `members` of the ensemble answer."""

    target: float
    event: Event
    boxes: tuple[Box, ...]
    members: int


class Probabilities:
    """P of the event at the last time for each box, at scales (G,), each asked for once."""

    def __init__(self, scaled: Scaled, question: Question) -> None:
        self.scaled, self.question = scaled, question
        self._known: dict[tuple[bytes, int], list[Probability]] = {}

    def at(self, scales: FloatArray, members: int | None = None) -> list[Probability]:
        """One probability a box, with its interval."""
        count = self.question.members if members is None else members
        key = (np.asarray(scales, float).tobytes(), count)
        if key not in self._known:
            margin = normal_factor() * path_error(self.scaled, scales)
            result = self._confinement(scales, margin, count)
            self._known[key] = probabilities(result, self.question.event)
        return self._known[key]

    def measured(self, scales: FloatArray, error: FloatArray) -> list[Probability]:
        """The same with a path error (T, Q) that was measured at these scales."""
        margin = normal_factor() * np.nan_to_num(error)
        result = self._confinement(scales, margin, self.question.members)
        return probabilities(result, self.question.event)

    def _confinement(self, scales: FloatArray, margin: FloatArray, count: int) -> Confinement:
        gathered = DoubtfulConfinement(self.scaled.times, self.question.boxes, margin)
        for values in self.scaled.blocks(scales, count):
            gathered.update(values, self.scaled.ended, self.scaled.doubted(scales))
        return self.scaled.counted(gathered.result())

    def limit(self, moved: FloatArray) -> float:
        """The largest scale up to `LIMIT` at which most members stay within what runs cover."""
        scale = LIMIT
        while scale > 1.0:
            scales = np.where(moved, scale, 1.0)
            for _ in self.scaled.blocks(scales, min(LOOK, self.question.members)):
                pass
            if self.scaled.far <= LOST:
                break
            scale /= np.sqrt(2.0)
        return max(float(scale), 1.0)


def probabilities(result: Confinement, event: Event) -> list[Probability]:
    """At the last time; NaN where the arcs did not reach it."""
    value = result.inside if event == "inside" else result.survival
    ends = result.inside_interval if event == "inside" else result.survival_interval
    return [
        Probability(float(p), float(low), float(high))
        for p, low, high in zip(value[:, -1], ends.low[:, -1], ends.high[:, -1], strict=True)
    ]


def question_of(
    scaled: Scaled, target: float, event: Event, box_of: str | None, members: int | None
) -> Question:
    """The boxes asked about; InputError for a bad target, no box, or one that is empty at first."""
    if not 0.0 < target < 1.0:
        raise InputError(f"target {target:g} is no probability between 0 and 1")
    single, _ = boxes_of(scaled.study)
    if not single:
        raise InputError("the study has no box: give a quantity a box = [low, high]")
    if box_of is not None and box_of not in [box.name for box in single]:
        boxed = ", ".join(box.name for box in single)
        raise InputError(f"no box belongs to {box_of!r}; there are boxes of: {boxed}")
    chosen = tuple(box for box in single if box_of in (None, box.name))
    count = min(scaled.study.ensemble.members, MEMBERS) if members is None else members
    ones = np.ones(len(scaled.groups))
    first = scaled.members(ones, 0, min(count, LOOK))
    if not np.isfinite(first[:, -1]).any():
        raise InputError(
            "the arcs stopped before the end of the horizon, so nothing can be said of it; see why "
            "on the study's page"
        )
    check_start(chosen, first[:, 0])
    return Question(target, event, chosen, count)


def allowances(
    scaled: Scaled,
    target: float,
    event: Event = "inside",
    box_of: str | None = None,
    members: int | None = None,
) -> xr.Dataset:
    """Allowances of each source, one at a time and all noise sources together.

    `allowance_scale` (source, quantity) with ends: the largest factor at which P(event at the end)
    >= target, NaN where no factor from 0 upwards reaches it, infinite where every one looked at
    does; `allowance` the same as an intensity in the study's unit (of start and parameters: the
    factor); `allowance_limit` the largest factor looked at; `reachable_low`, `reachable_high` the
    probabilities that were met with; `joint_allowance_scale` (quantity) for all noise sources;
    `pair_probability` (pair, first_scale, second_scale, quantity) on a grid. Quantities without a
    box are NaN. InputError as `question_of`.
    """
    question = question_of(scaled, target, event, box_of, members)
    curves = Probabilities(scaled, question)
    names = [q.name for q in scaled.study.quantity]
    columns = [names.index(box.name) for box in question.boxes]
    made = _Table(scaled, names)
    for g in range(len(scaled.groups)):
        moved = np.arange(len(scaled.groups)) == g
        for k, found in enumerate(_found(curves, moved)):
            made.enter(g, columns[k], found)
    noise = np.array([group.kind == "noise" for group in scaled.groups], bool)
    together = list(_found(curves, noise)) if noise.any() else []
    data = made.dataset(question)
    joint = np.full((3, len(names)), np.nan)
    for k, found in enumerate(together):
        joint[:, columns[k]] = _scales(found)
    for suffix, values in zip(("", "_low", "_high"), joint, strict=True):
        attributes = {"units": "1", "long_name": "common factor of all noise sources" + suffix}
        data[f"joint_allowance_scale{suffix}"] = ("quantity", values, attributes)
    _add_pairs(data, curves, columns)
    return data


def _found(curves: Probabilities, moved: FloatArray) -> Iterator[Allowance]:
    """One allowance a box, for a common factor of the groups `moved`."""
    limit = curves.limit(moved)
    question = curves.question
    for k in range(len(question.boxes)):

        def probability(scale: float, k: int = k) -> Probability:
            return curves.at(np.where(moved, scale, 1.0))[k]

        yield find_allowance(probability, question.target, limit, PRECISION)


def _scales(found: Allowance) -> tuple[float, float, float]:
    """(factor, low, high); infinite where the limit still keeps the target."""
    limit = float(found.scales.max())
    ends = [np.inf if s >= limit else s for s in (found.scale, found.low, found.high)]
    return ends[0], ends[1], ends[2]


class _Table:
    """Allowances as they are found, (source, quantity)."""

    def __init__(self, scaled: Scaled, names: list[str]) -> None:
        self.scaled, self.names = scaled, names
        shape = (len(scaled.groups), len(names))
        self.scales = np.full((3, *shape), np.nan)
        self.limit, self.monotone = np.full(shape, np.nan), np.ones(shape, bool)
        self.reachable = np.full((2, *shape), np.nan)

    def enter(self, group: int, quantity: int, found: Allowance) -> None:
        self.scales[:, group, quantity] = _scales(found)
        self.limit[group, quantity] = found.scales.max()
        self.reachable[:, group, quantity] = found.reachable
        self.monotone[group, quantity] = found.monotone

    def dataset(self, question: Question) -> xr.Dataset:
        study, groups = self.scaled.study, self.scaled.groups
        intensity = {n.name: (n.intensity, n.unit, n.per) for n in study.noise}
        strength = np.array([intensity.get(g.name, (1.0, "", None))[0] for g in groups])
        units = [_unit(*intensity[g.name][1:]) if g.name in intensity else "" for g in groups]
        dims = ("source", "quantity")
        variables = {}
        words = f"largest factor at which P({question.event}) at the end keeps the target"
        for suffix, values in zip(("", "_low", "_high"), self.scales, strict=True):
            label = words + (suffix and f", {suffix[1:]} end of its 95 % interval")
            variables[f"allowance_scale{suffix}"] = (dims, values, _labels("1", label))
            absolute = values * strength[:, None]
            variables[f"allowance{suffix}"] = (
                dims, absolute, _labels("", label.replace("factor", "intensity")),
            )  # fmt: skip
        variables["allowance_limit"] = (dims, self.limit, _labels("1", "largest factor looked at"))
        for k, end in enumerate(("low", "high")):
            label = f"{'smallest' if k == 0 else 'largest'} P met with from factor 0 to the limit"
            variables[f"reachable_{end}"] = (dims, self.reachable[k], _labels("1", label))
        kinds = [g.kind for g in groups]
        return xr.Dataset(
            variables,
            coords={
                "source": [g.name for g in groups],
                "source_kind": ("source", kinds),
                "source_unit": ("source", units),
                "quantity": self.names,
            },
            attrs={
                "target": question.target, "event": question.event, "members": question.members,
                "title": study.title,
            },
        )  # fmt: skip


def _labels(units: str, long_name: str) -> dict[str, str]:
    return {"units": units, "long_name": long_name}


def _unit(unit: str, per: str | None) -> str:
    return f"{unit} (per sqrt {per})" if per else unit


def _add_pairs(data: xr.Dataset, curves: Probabilities, columns: list[int]) -> None:
    """P on a grid of factors of each two noise sources, where there are few of them."""
    scaled = curves.scaled
    noise = [g for g, group in enumerate(scaled.groups) if group.kind == "noise"]
    pairs = list(combinations(noise, 2))
    if not 1 <= len(pairs) <= PAIRS:
        return
    values = np.full((len(pairs), len(GRID), len(GRID), data.sizes["quantity"]), np.nan)
    members = min(PAIR_MEMBERS, curves.question.members)
    for p, (one, two) in enumerate(pairs):
        for i, s in enumerate(GRID):
            for j, t in enumerate(GRID):
                scales = np.ones(len(scaled.groups))
                scales[[one, two]] = s, t
                values[p, i, j, columns] = [q.value for q in curves.at(scales, members)]
    dims = ("pair", "first_scale", "second_scale", "quantity")
    words = f"P({curves.question.event}) at the end with two noise sources scaled"
    data["pair_probability"] = (dims, values, _labels("1", words))
    data.coords["pair"] = [f"{scaled.names[a]}, {scaled.names[b]}" for a, b in pairs]
    data.coords["first_scale"] = data.coords["second_scale"] = list(GRID)


def remarks(data: xr.Dataset) -> list[str]:
    """Targets that cannot be reached, with the range that can, and limits that were not found."""
    said = []
    target = float(data.attrs["target"])
    event = str(data.attrs["event"])
    for name in data["quantity"].values:
        part = data.sel(quantity=name)
        for source in data["source"].values:
            one = part.sel(source=source)
            limit, scale = float(one["allowance_limit"]), float(one["allowance_scale"])
            low, high = float(one["reachable_low"]), float(one["reachable_high"])
            if np.isnan(limit):
                continue
            if np.isnan(scale):
                said.append(
                    f"{name}: no strength of {source} alone keeps P({event}) at {number(target)}; "
                    f"from 0 to {number(limit)} times its strength P is {number(low)} to "
                    f"{number(high)}."
                )
            elif np.isinf(scale):
                said.append(
                    f"{name}: with {source} at {number(limit)} times its strength P({event}) is "
                    f"still {number(low)} or more; beyond that "
                    + (
                        "nothing was tried."
                        if limit >= LIMIT
                        else "most members pass outside what the runs cover."
                    )
                )
    return said
