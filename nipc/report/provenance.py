"""Where a result comes from, and what it should be read with."""

from __future__ import annotations

import numpy as np
import xarray as xr

from nipc.report import reading
from nipc.report.numbers import amount, number, seconds


def origin(dataset: xr.Dataset) -> list[tuple[str, str]]:
    """How the result was made: names and values."""
    held = dataset.attrs
    rows: list[tuple[str, str]] = []
    if "created" in held:
        rows.append(("made", str(held["created"])))
    if "seed" in held:
        rows.append(("seed", str(held["seed"])))
    for name, label in (
        ("propagator_runs", "runs of the propagator"),
        ("run_equivalents", "run-equivalents"),
        ("budget", "budget of runs"),
        ("failed_runs", "failed runs"),
    ):
        if np.isfinite(float(held.get(name, np.nan))):
            rows.append((label, number(float(held[name]), 6)))
    if "tolerance" in held:
        rows.append(("tolerance", f"{number(float(held['tolerance']))} of the spread"))
    if "monitoring_interval" in held:
        rows.append(
            (
                "monitoring interval",
                amount(float(held["monitoring_interval"]), reading.time_unit(dataset), 3),
            )
        )
    if "wall_time" in held:
        rows.append(("wall time", seconds(float(held["wall_time"]))))
    versions = reading.listed(dataset, "versions")
    if isinstance(versions, dict):
        rows.append(("versions", ", ".join(f"{k} {v}" for k, v in versions.items())))
    return rows


def cautions(dataset: xr.Dataset) -> list[str]:
    """What this very result should be read with."""
    unit, said = reading.time_unit(dataset), []
    for quantity in reading.quantities(dataset):
        trust = reading.trust(dataset, quantity)
        if not trust.checked:
            said.append(
                f"{quantity}: not checked against direct runs; nothing said of it is confirmed."
            )
        elif trust.mark(trust.end):
            words = f"{quantity}: single paths agree with direct runs up to "
            words += amount(trust.paths, unit, 3) if np.isfinite(trust.paths) else "no time"
            if trust.distribution > trust.paths:
                words += f", its distribution up to {amount(trust.distribution, unit, 3)}"
            said.append(words + "; what is shown later is marked, and not confirmed.")
    interval = dataset.attrs.get("monitoring_interval")
    findings = reading.listed(dataset, "findings") or []
    if any(str(f).startswith("Boxes are looked at") for f in findings):
        interval = None  # said above
    if interval is not None and reading.has(dataset, "survival_probability"):
        said.append(
            f"Boxes are watched every {amount(float(interval), unit, 3)}; a motion that "
            "leaves and comes back in between is not seen, so that survival may be "
            "overstated."
        )
    failed = int(dataset.attrs.get("failed_runs", 0))
    if failed:
        said.append(
            f"{failed} runs of the propagator failed; if they failed because of where they "
            "were, the answers lean away from there."
        )
    return said
