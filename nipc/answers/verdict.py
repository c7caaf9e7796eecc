"""The findings in plain sentences: stays or leaves, since when, why, how sure, what to change.

Each sentence carries its numbers with their intervals, speaks of a time that held-out runs have
confirmed, and says up to when that is.
"""

from __future__ import annotations

import numpy as np
import xarray as xr

from nipc.answers.overall import endings, joint, monitoring, runs, separation
from nipc.answers.reading import View
from nipc.answers.wording import estimate, number, percent

PART = 0.1  # of the variance, below which a source's frequencies are not worth a sentence
RESONANT = 0.5  # of what it gives, from one narrow band
FEW, SLOW = 5.0, 0.8  # turns in the time elapsed that are slow, and how much must come from them

FEWEST_LEAVING = 50
"""Members that leave, or stay, below which it is not said what decides who leaves."""


def findings(dataset: xr.Dataset) -> list[str]:
    """Sentences on each quantity of a result, then on the joint boxes and on the runs."""
    sentences: list[str] = []
    views = [View(dataset, str(name)) for name in dataset["quantity"].values]
    # whether it stays comes first: quantities that have a box before those that have none
    views.sort(key=lambda view: bool(np.isnan(view.triple("survival_probability")[0])))
    for view in views:
        if view.trust.index == 0:
            sentences.append(
                f"Nothing can be said of {view.name} beyond the start: held-out direct runs differ"
                f" from the expansion there. {view.trust.clause}"
            )
            continue
        parts = (_confinement, _spread, _law, _driver, _frequencies, _allowance, _nonlinear)
        said = [part(view) for part in parts]
        sentences += [f"{s} {view.trust.clause}" for s in said if s]
    sentences += joint(dataset) + endings(dataset) + separation(dataset)
    sentences += monitoring(dataset) + runs(dataset)
    return sentences


def _confinement(view: View) -> str | None:
    low, high = view.value("box_low"), view.value("box_high")
    survival = view.triple("survival_probability")
    if np.isnan(survival[0]):
        return None
    box = _box(low, high, view.unit)
    sure_low = survival[1] if np.isfinite(survival[1]) else survival[0]
    sure_high = survival[2] if np.isfinite(survival[2]) else survival[0]
    verb = "may leave" if sure_low < 0.99 else "stays in"
    verb = "leaves" if sure_high < 0.5 else verb
    text = (
        f"{view.name} {verb} its box ({box}): the probability of having stayed in it up to"
        f" {view.when} is {estimate(*survival)}"
    )
    inside = view.triple("inside_probability")
    if np.isfinite(inside[0]) and inside[0] - survival[0] > 0.005:
        text += f", that of being in it then {estimate(*inside)}"
    return f"{text}{_exits(view)}."


def _box(low: float, high: float, unit: str) -> str:
    if np.isfinite(low) and np.isfinite(high):
        return f"{number(low)} to {number(high)} {unit}".strip()
    if np.isfinite(low):
        return f"at least {number(low)} {unit}".strip()
    return f"at most {number(high)} {unit}".strip()


def _exits(view: View) -> str:
    """`; 2.5 % have left by 12 d and 50 % by 20 d`, of the levels reached while trusted."""
    if "exit_time_quantile" not in view.data:
        return ""
    until = float(view.times[view.trust.index])
    said = {}
    for level in view.data["level"].values:
        time, low, high = view.triple("exit_time_quantile", level=level)
        if time <= until:
            ends = low, high if high <= until else np.nan
            said[float(level)] = (
                f"{100 * level:g} % have left by {estimate(time, *ends, view.clock)}"
            )
    chosen = dict.fromkeys([*list(said)[:1], *(level for level in said if level == 0.5)])
    return "".join(f"; {said[level]}" for level in chosen)


def _spread(view: View) -> str | None:
    std = view.triple("std")
    if np.isnan(std[0]):
        return None
    if std[0] == 0.0:
        return f"{view.name} has no spread at {view.when}, so that driver shares are undefined."
    return f"The standard deviation of {view.name} is {estimate(*std, view.unit)} at {view.when}."


def _law(view: View) -> str | None:
    if "spreading_verdict" not in view.data:
        return None
    verdict = str(view.data["spreading_verdict"].item())
    of = str(view.data["spreading_of"].item()) if "spreading_of" in view.data else ""
    subject = f"The spreading of {view.name}" + (f" ({of})" if of else "")
    if verdict in ("", "nan", "no spread"):
        return None
    exponent = view.triple("diffusion_exponent")
    if verdict == "cannot tell":
        told = "spreading_evidence" in view.data
        reason = str(view.data["spreading_evidence"].item()) if told else ""
        known = "" if np.isnan(exponent[0]) else f" (the exponent is {estimate(*exponent)})"
        return f"{subject} cannot be told to follow one law{known}{': ' * bool(reason)}{reason}."
    text = f"{subject} is {verdict}"
    coefficient = view.triple("diffusion_coefficient")
    if np.isfinite(exponent[0]):
        text += f": its variance grows as 2 D t^a with a = {estimate(*exponent)}"
    if np.isfinite(coefficient[0]):
        square = f"{view.unit}^2" if view.unit.isalnum() else f"({view.unit})^2"
        square = square if view.unit not in ("", "1") else "1"
        unit = f"{square}/{view.clock}" if verdict == "diffusive" else f"{square}/{view.clock}^a"
        text += f" and D = {estimate(*coefficient, unit)}"
    rate, plateau = view.triple("diffusion_rate"), view.triple("diffusion_plateau")
    if verdict == "exponential" and np.isfinite(rate[0]):
        text += f": its standard deviation grows as exp(k t) with k = {estimate(*rate)}"
        text += f" per {view.clock}"
    elif verdict == "exponential" and np.isfinite(now := view.value("spread_rate")):
        text += f": the spread grows at {number(now, 3)} per {view.clock} at {view.when}"
    if verdict == "bounded" and plateau[0] > 0.0:
        value, low, high = (float(np.sqrt(max(p, 0.0))) for p in plateau)
        text += f": its standard deviation stays at {estimate(value, low, high, view.unit)}"
    return text + "."


def _driver(view: View) -> str | None:
    ranked = view.ranked("driver_total")
    if not ranked:
        return None
    first = ranked[0][0]
    text = (
        f"What spreads {view.name} most is {view.source(first)}, with"
        f" {percent(*view.triple('driver_total', source=first))} of its variance at {view.when}"
    )
    if len(ranked) > 1:
        second = ranked[1][0]
        text += (
            f"; next is {view.source(second)}, with"
            f" {percent(*view.triple('driver_total', source=second))}"
        )
    leaving = _leaving(view)
    if leaving is not None and leaving != first:
        text += f"; whether it leaves by the end is decided most by {view.source(leaving)}"
        text += view.unconfirmed
    return text + "."


def _leaving(view: View) -> str | None:
    """What decides most who leaves, where enough members do and the first two can be told apart."""
    ranked = view.ranked("exit_driver_total")
    if not ranked:
        return None
    survival = float(view.data["survival_probability"].isel(time=-1).item())
    members = float(view.dataset.attrs.get("members", np.nan))
    if members * min(survival, 1.0 - survival) < FEWEST_LEAVING:
        return None
    if len(ranked) > 1:
        low = view.value("exit_driver_total_low", source=ranked[0][0])
        high = view.value("exit_driver_total_high", source=ranked[1][0])
        if not low > high:
            return None
    return ranked[0][0]


def _frequencies(view: View) -> str | None:
    """Of the strongest noise source: whether a narrow band of it drives, or its slow part."""
    share_of = [(s, t) for s, t in view.ranked("driver_total") if view.kind(s) == "noise"]
    told = view.value("band_time")
    if not share_of or share_of[0][1] < PART:
        return None
    if view.value("nonlinear_share") > 0.5 or not told <= view.times[view.trust.index] * (
        1 + 1e-12
    ):
        return None  # what is told to first order is not what drives it, or not trusted
    source = share_of[0][0]
    return _resonance(view, source, told) or _slow(view, source, told)


def _resonance(view: View, source: str, told: float) -> str | None:
    share = view.triple("resonance_share", source=source)
    if not share[1] >= RESONANT:
        return None
    frequency = view.value("resonance_frequency", source=source)
    width = view.value("resonance_width", source=source)
    ends = number(1.0 / (frequency + width), 3), number(1.0 / (frequency - width), 3)
    return (
        f"{view.name} resonates with {view.source(source)}: {percent(*share)} of the variance that"
        f" it gives to first order at {number(told)} {view.clock} comes from noise of periods"
        f" {ends[0]} to {ends[1]} {view.clock}, most at {number(1.0 / frequency, 3)} {view.clock}."
    )


def _slow(view: View, source: str, told: float) -> str | None:
    """Where nearly all comes from noise of fewer than `FEW` turns in the time elapsed."""
    if "band_share" not in view.data:
        return None
    tops = np.asarray(view.data["band_high"].values, float)
    slow = np.flatnonzero(tops <= FEW / (told - view.times[0]))
    if not slow.size:
        return None
    # errors of the bands added up, as if they went together
    value, low, high = (
        float(view.data[f"band_share{end}"].sel(source=source).values[slow].sum())
        for end in ("", "_low", "_high")
    )
    if not low >= SLOW:
        return None
    share = percent(value, low, min(high, 1.0))
    return (
        f"It is the slow part of {view.source(source)} that drives {view.name}: {share} of the"
        f" variance that it gives to first order at {number(told)} {view.clock} comes from noise of"
        f" periods longer than {number(1.0 / tops[slow[-1]], 3)} {view.clock}."
    )


def _allowance(view: View) -> str | None:
    """What to change, by the source that drives the leaving, or else the spread."""
    boxed = np.isfinite([view.value("box_low"), view.value("box_high")]).any()
    if "allowance_scale" not in view.data or not boxed:
        return None
    asked = view.data["allowance_scale"]
    if np.isnan(view.data["allowance_limit"].values).all():
        return None  # not asked of this box
    event = "inside all the time" if asked.attrs.get("event") == "survival" else "inside"
    goal = f"P({event}) of {view.name} at"
    goal += f" {number(float(asked.attrs['target']))} or above at the end of the horizon"
    order = [s for s, _ in view.ranked("exit_driver_total") or view.ranked("driver_total")]
    known = [s for s in order if not np.isnan(view.value("allowance_scale", source=s))]
    if not known:
        return f"No reduction of any single source keeps {goal}{view.unconfirmed}."
    source = known[0]
    scale, low, high = view.triple("allowance_scale", source=source)
    if np.isinf(scale):
        limit = view.value("allowance_limit", source=source)
        return (
            f"Even {view.source(source)} {number(limit)} times as strong keeps {goal}"
            f"{view.unconfirmed}; beyond that nothing was tried."
        )
    change = "must be brought down to" if scale < 1.0 else "may be raised to"
    text = (
        f"To keep {goal}, {view.source(source)} {change} {estimate(scale, low, high)} times its"
        " present strength, all else unchanged"
    )
    text += view.unconfirmed
    if source != order[0]:
        text += f" ({view.source(order[0])}, the strongest driver, cannot do it alone)"
    return text + "."


def _nonlinear(view: View) -> str | None:
    share = view.value("nonlinear_share")
    if not share > 0.1:
        return None
    return (
        f"{percent(share, np.nan, np.nan)} of the variance of {view.name} at {view.when} lies"
        " beyond first order: a linear, small-noise picture is not enough."
    )
