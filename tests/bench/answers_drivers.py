"""Driver shares of the slot watch's dynamics: a chain's against the propagator's own.

The reference knows nothing of nipc: the example's right-hand side under white noise held over
steps of an eightieth of a day, pick-and-freeze by Jansen's estimators (1999) on whole runs.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path
from types import ModuleType

import numpy as np
import xarray as xr

import nipc.workflow as workflow

EXAMPLE = Path(__file__).parents[2] / "examples" / "slot_watch"
GROUPS = ("radial", "tangential", "start")
STEP, DAYS = 0.0125, 28
AT = (1, 3, 7, 14, 28)  # days at which shares are compared


def module(name: str) -> ModuleType:
    """A file of the example."""
    spec = importlib.util.spec_from_file_location(f"slot_watch_{name}", EXAMPLE / f"{name}.py")
    assert spec is not None
    assert spec.loader is not None
    made = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(made)
    return made


def by_chain(folder: Path, members: int) -> xr.Dataset:
    """The example's own study, with so many members."""
    study = workflow.load_study(EXAMPLE / "study.toml")
    study = study.model_copy(update={"ensemble": study.ensemble.model_copy(
        update={"members": members})})  # fmt: skip
    return workflow.run(study, folder=folder, backend="inline").dataset


def flown(start: np.ndarray, keys: tuple[int, int], n: int) -> np.ndarray:
    """Quantities (n, len(AT), 3) of standard starts (n, 4); each key seeds one source's noise."""
    dynamics, slot = module("dynamics"), module("slot")
    mean = np.array([42164.7, 0.0, 0.0, 3.0747612])
    x = mean + start * np.array([0.05, 0.1, 1e-5, 3e-6])
    streams = [np.random.default_rng(key) for key in keys]
    size = np.array([2e-8, 3e-9]) / np.sqrt(STEP * 86400.0)
    none, out = np.empty((n, 0)), []
    for k in range(round(DAYS / STEP)):
        xi = size * np.stack([s.standard_normal(n) for s in streams], axis=1)
        t, h = k * STEP, STEP
        k1 = dynamics.rates(t, x, xi, none)
        k2 = dynamics.rates(t + h / 2, x + h / 2 * k1, xi, none)
        k3 = dynamics.rates(t + h / 2, x + h / 2 * k2, xi, none)
        k4 = dynamics.rates(t + h, x + h * k3, xi, none)
        x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        day = (k + 1) * STEP
        if any(abs(day - d) < 1e-9 for d in AT):
            longitude = slot.offset(np.array([day]), x[:, None], none)[:, 0]
            radius = np.hypot(x[:, 0], x[:, 1])
            energy = 0.5 * (x[:, 2] ** 2 + x[:, 3] ** 2) - 398600.4418 / radius
            out.append(np.stack([radius, longitude, energy], axis=1))
    return np.stack(out, axis=1)


def direct(n: int, seed: int = 4711, block: int = 10_000) -> tuple[np.ndarray, np.ndarray]:
    """First and total shares (3, len(AT), 3) from 5 n runs."""
    parts = []
    for b in range(n // block):
        rng = np.random.default_rng([seed, b])
        starts = rng.standard_normal((2, block, 4))
        keys = rng.integers(2**62, size=(2, 2))
        own, other = tuple(keys[0]), tuple(keys[1])
        a, c = flown(starts[0], own, block), flown(starts[1], other, block)
        mixed = [
            flown(starts[0], (other[0], own[1]), block),
            flown(starts[0], (own[0], other[1]), block),
            flown(starts[1], own, block),
        ]
        parts.append((
            np.stack([0.5 * np.mean((c - m) ** 2, axis=0) for m in mixed]),
            np.stack([0.5 * np.mean((a - m) ** 2, axis=0) for m in mixed]),
            0.5 * (a.var(axis=0) + c.var(axis=0)),
        ))  # fmt: skip
    rest, total, variance = (np.mean([p[k] for p in parts], axis=0) for k in range(3))
    return 1.0 - rest / variance, total / variance


def largest_gap(data: xr.Dataset, reference: tuple[np.ndarray, np.ndarray]) -> float:
    """Between a result's shares and the reference, over sources, quantities, times, both kinds."""
    gaps = []
    for name, exact in zip(("driver_first", "driver_total"), reference, strict=True):
        found = data[name].sel(source=list(GROUPS), quantity=["radius", "longitude", "energy"])
        found = found.sel(time=list(AT)).transpose("source", "time", "quantity").values
        gaps.append(np.abs(found - exact).max())
    return float(max(gaps))
