"""Findings on the whole of a result: joint boxes, endings, separation, monitoring, runs."""

from __future__ import annotations

import numpy as np
import xarray as xr

from nipc.answers.reading import View, clock_of
from nipc.answers.wording import estimate, number, percent

GROWN, STEADY = 3.0, 0.35  # ln of the separation, and its later half's part, of exponential growth


def joint(dataset: xr.Dataset) -> list[str]:
    """On the boxes of several quantities, at the earliest of all trust horizons."""
    if "joint" not in dataset.coords or "joint_survival_probability" not in dataset:
        return []
    views = [View(dataset, str(name)) for name in dataset["quantity"].values]
    view = min(views, key=lambda v: v.trust.index)
    if view.trust.index == 0:
        return []  # said of the quantity already
    sentences = []
    for name in dataset["joint"].values:
        value, low, high = view.triple("joint_survival_probability", joint=name)
        sentences.append(
            f"The probability of having stayed in all of the joint box {str(name)!r} up to"
            f" {view.when} is {estimate(value, low, high)}. {view.trust.clause}"
        )
    return sentences


def endings(dataset: xr.Dataset) -> list[str]:
    """How many motions end early for a physical reason, up to the earliest of all horizons."""
    if "ended_probability" not in dataset:
        return []
    view = min(
        (View(dataset, str(name)) for name in dataset["quantity"].values),
        key=lambda v: v.trust.index,
    )
    share = percent(*view.triple("ended_probability"))
    return [
        "The motion ends early, for the physical reason that the propagator tells, with a"
        f" probability of {share} by {view.when}; it then counts as having left."
        f" {view.trust.clause}"
    ]


def separation(dataset: xr.Dataset) -> list[str]:
    """How fast neighbours move apart, up to the earliest of all trust horizons."""
    if "lyapunov_exponent" not in dataset or not dataset.sizes["quantity"]:
        return []
    views = [View(dataset, str(name)) for name in dataset["quantity"].values]
    view = min(views, key=lambda v: v.trust.index)
    begin = view.value("lyapunov_begin")
    elapsed = float(view.times[view.trust.index]) - begin
    rate, half_way = view.triple("lyapunov_exponent", level=0.5), elapsed / 2.0 + begin
    if not (np.isfinite(rate[0]) and elapsed > 0.0):
        return []
    middle = view.data["lyapunov_exponent"].sel(level=0.5).values
    known = np.isfinite(middle)
    before = np.interp(half_way, view.times[known], middle[known]) * (half_way - begin)
    growth = rate[0] * elapsed
    ends = [view.value("lyapunov_exponent", level=e) for e in (0.025, 0.975)]
    # e^3, of which the later half of the time gave its part: a power of time gives ln 2 / ln t
    if growth >= GROWN and growth - before >= STEADY * growth:
        spread = ""
        if ends[1] - ends[0] > 0.05 * abs(rate[0]):
            spread = f"; 95 % of the members have {number(ends[0], 3)} to {number(ends[1], 3)}"
        unit = f"per {view.clock}" if view.clock else ""
        text = (
            "Neighbouring motions move apart exponentially: their largest finite-time Lyapunov"
            f" exponent up to {view.when} is {estimate(*rate, unit)} (median{spread}), a factor e"
            f" every {number(1.0 / rate[0], 3)} {view.clock}".rstrip()
        )
    else:
        factors = [number(float(np.exp(r * elapsed))) for r in (rate[0], *ends)]
        text = (
            "Neighbouring motions do not move apart exponentially: up to"
            f" {view.when} by a factor of {factors[0]} (median; {factors[1]} to {factors[2]} for"
            " 95 % of the members) in the direction that grows most"
        )
    return [f"{text}. {view.trust.clause}"]


def monitoring(dataset: xr.Dataset) -> list[str]:
    """How often boxes are looked at."""
    step = float(dataset.attrs.get("monitoring_interval", np.nan))
    boxed = "survival_probability" in dataset and bool(
        np.isfinite(dataset["survival_probability"].values).any()
    )
    if not boxed or not np.isfinite(step):
        return []
    return [
        f"Boxes are looked at every {number(step)} {clock_of(dataset)}; a shorter excursion is not"
        " seen, so survival may be overstated."
    ]


def runs(dataset: xr.Dataset) -> list[str]:
    """What the answers took."""
    made, failed = dataset.attrs.get("propagator_runs"), int(dataset.attrs.get("failed_runs", 0))
    if made is None:
        return []
    text = f"These answers took {int(made)} runs of the propagator"
    equivalents = dataset.attrs.get("run_equivalents")
    if equivalents is not None and np.isfinite(float(equivalents)):
        text += f", as much work as {number(float(equivalents))} over the whole horizon"
    if failed:
        text += f"; {failed} of them failed and are missing"
    return [text + "."]
