"""Cylindrical coordinates with the angular momentum about the axis."""

from __future__ import annotations

from typing import ClassVar, Literal

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.charts.base import ChartContext
from nipc.problem.charts.polar import from_polar, to_polar, zero_radius
from nipc.problem.charts.roles import RoleChart, RoleSettings


class CylindricalSettings(RoleSettings):
    name: Literal["cylindrical"]
    rotation_rate: float = 0.0


class Cylindrical(RoleChart):
    """(r, theta - rate t, z, dr/dt, x vy - y vx, vz): `Polar` and a straight third axis."""

    name: ClassVar[str] = "cylindrical"
    Settings = CylindricalSettings
    angles = (1,)

    def __init__(self, settings: CylindricalSettings, context: ChartContext) -> None:
        super().__init__(settings, context, dimensions=(3,))
        self.rate = settings.rotation_rate
        length, speed = self.length_unit, self.speed_unit
        self.label(
            ("radius", "polar_angle", "height", "radial_velocity", "angular_momentum", "climb"),
            (length, "rad", length, speed, f"{length} {speed}", speed),
        )

    @classmethod
    def build(cls, settings: CylindricalSettings, context: ChartContext) -> Cylindrical:
        return cls(settings, context)

    def forward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        r, angle, vr, momentum = to_polar(core[[0, 1, 3, 4]], self.rate * np.asarray(t))
        return r, angle, core[2], vr, momentum, core[5]

    def backward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        x, y, vx, vy = from_polar(core[[0, 1, 3, 4]], self.rate * np.asarray(t))
        return x, y, core[2], vx, vy, core[5]

    def angle_rates(self, values: FloatArray, times: FloatArray) -> FloatArray:
        with np.errstate(invalid="ignore", divide="ignore"):
            return (values[..., 4] / values[..., 0] ** 2 - self.rate)[..., None]

    def singularity(self, states: FloatArray, t: float) -> str | None:
        return zero_radius(self.core(states))
