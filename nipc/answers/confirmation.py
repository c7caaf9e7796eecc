"""Direct runs at an allowance, as a control on what the expansions say of it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr

from nipc.answers import present
from nipc.answers.allowance import Probability
from nipc.answers.allowances import Event, Probabilities, Question, question_of
from nipc.answers.boxes import inside_indicator, survival_indicator
from nipc.answers.intervals import normal_factor
from nipc.answers.scaled import Scaled
from nipc.answers.wording import estimate, number
from nipc.arrays import FloatArray
from nipc.errors import InputError


@dataclass(frozen=True)
class Confirmed:
    """P at an allowance by the chain, by it and direct runs together, and the runs behind it.

    The direct runs are of `pairs` members whose expansions' answers are known too; `changed` of
    them end on the other side. together = P of all members + mean of the pairs' differences (the
    expansions as a control variate). Its interval holds the ensemble's chance, the paths' error as
    measured at this very strength, and the chance of the differences.
    """

    source: str
    quantity: str
    scale: float
    expansions: Probability
    together: Probability
    pairs: int
    changed: int

    def __str__(self) -> str:
        return (
            f"{self.source} at {number(self.scale)} times its strength, box of {self.quantity}: of "
            f"{self.pairs} direct runs {self.changed} ended on another side than their expansions; "
            f"P = {estimate(*self.together)} together, {estimate(*self.expansions)} by the "
            "expansions alone."
        )


def confirm(
    scaled: Scaled, data: xr.Dataset, runs: int, members: int | None = None
) -> list[Confirmed]:
    """Direct runs at each allowance that was found, the same members that the expansions answer."""
    done = []
    event: Event = data.attrs["event"]
    for g, source in enumerate(scaled.names):
        for name in data["quantity"].values:
            scale = float(data["allowance_scale"].sel(quantity=name)[g])
            if not np.isfinite(scale):
                continue
            count = data.attrs["members"] if members is None else members
            question = question_of(scaled, data.attrs["target"], event, str(name), count)
            scales = np.where(np.arange(len(scaled.names)) == g, scale, 1.0)
            label = f"allowance of {source}, {name}"
            done.append(_paired(scaled, question, scales, runs, label, source, scale))
    return done


def _paired(
    scaled: Scaled,
    question: Question,
    scales: FloatArray,
    runs: int,
    label: str,
    source: str,
    scale: float,
) -> Confirmed:
    box = question.boxes[0]
    of = inside_indicator if question.event == "inside" else survival_indicator
    direct = scaled.direct(scales, runs, label)
    held = [of(direct, scaled.times, box, scaled.ended)[:, -1]]
    expanded = scaled.members(scales, 0, runs)
    held.append(of(expanded, scaled.times, box, scaled.ended)[:, -1])
    known = np.isfinite(held[0]) & np.isfinite(held[1])
    if not known.any():
        raise InputError("no direct run of the confirmation ended well; see `nipc status`")
    change = (held[0] - held[1])[known]
    shift = float(change.mean())
    chance = normal_factor() * float(change.std()) / np.sqrt(change.size)
    error = present.size(direct - expanded)
    alone = Probabilities(scaled, question).measured(scales, error)[0]
    ends = alone.value + shift, alone.low + shift - chance, alone.high + shift + chance
    together = Probability(*(float(np.clip(end, 0.0, 1.0)) for end in ends))
    return Confirmed(
        source, box.name, scale, alone, together, int(known.sum()), int(np.abs(change).sum())
    )
