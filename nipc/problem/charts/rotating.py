"""The state carried back to time zero by its linear motion."""

from __future__ import annotations

from typing import ClassVar, Literal

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import ChartError
from nipc.problem.charts.base import ChartContext
from nipc.problem.charts.roles import RoleChart, RoleSettings


class RotatingSettings(RoleSettings):
    name: Literal["rotating"]
    frequencies: tuple[float, ...]


class Rotating(RoleChart):
    """(x cos wt - v sin(wt)/w, v cos wt + w x sin wt) for H = sum v^2/2 + w^2 x^2/2.

    The interaction picture: linear motion stands still, and what moves is the perturbation.
    Linear, regular everywhere, zero action included; w = 0 is free motion, x - v t.
    """

    name: ClassVar[str] = "rotating"
    Settings = RotatingSettings

    def __init__(self, settings: RotatingSettings, context: ChartContext) -> None:
        super().__init__(settings, context, dimensions=tuple(range(1, 100)))
        self.frequencies = oscillator_frequencies(self, settings.frequencies)
        positions, velocities = self.role_names()
        self.label(
            tuple(f"{name}_at_rest" for name in (*positions, *velocities)),
            tuple(context.units[k] for k in self._roles),
        )

    @classmethod
    def build(cls, settings: RotatingSettings, context: ChartContext) -> Rotating:
        return cls(settings, context)

    def _turn(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        positions, velocities = [], []
        for k, w in enumerate(self.frequencies):
            x, v = core[k], core[k + self.dimension]
            angle = w * np.asarray(t)
            c, s = np.cos(angle), np.sin(angle)
            lever = s / w if w > 0.0 else np.asarray(t, float)
            positions.append(x * c + v * lever)
            velocities.append(v * c - w * x * s)
        return (*positions, *velocities)

    def forward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        return self._turn(core, -np.asarray(t, float))

    def backward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        return self._turn(core, t)


def oscillator_frequencies(
    chart: RoleChart, frequencies: tuple[float, ...], zero: bool = True
) -> tuple[float, ...]:
    """One angular frequency per position, not negative (or positive); else a ChartError."""
    if len(frequencies) != chart.dimension:
        raise ChartError(
            f"chart {chart.name!r}: {len(frequencies)} frequencies for {chart.dimension} positions"
        )
    for w in frequencies:
        if not np.isfinite(w) or w < 0.0 or (w == 0.0 and not zero):
            raise ChartError(f"chart {chart.name!r}: {w} is no angular frequency for it")
    return frequencies
