"""Planar polar coordinates with the angular momentum."""

from __future__ import annotations

from typing import ClassVar, Literal

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.charts.angles import wrap
from nipc.problem.charts.base import ChartContext
from nipc.problem.charts.roles import RoleChart, RoleSettings


class PolarSettings(RoleSettings):
    name: Literal["polar"]
    rotation_rate: float = 0.0


class Polar(RoleChart):
    """(r, theta - rate t, dr/dt, x vy - y vx) of a planar state.

    The angular momentum, not r dtheta/dt, is the fourth component: under a central force it is
    constant whatever the radius, so what curvature is left in the flow is that of dtheta/dt = L/r^2
    and of the radial motion alone.
    """

    name: ClassVar[str] = "polar"
    Settings = PolarSettings
    angles = (1,)

    def __init__(self, settings: PolarSettings, context: ChartContext) -> None:
        super().__init__(settings, context, dimensions=(2,))
        self.rate = settings.rotation_rate
        length, speed = self.length_unit, self.speed_unit
        self.label(
            ("radius", "polar_angle", "radial_velocity", "angular_momentum"),
            (length, "rad", speed, f"{length} {speed}"),
        )

    @classmethod
    def build(cls, settings: PolarSettings, context: ChartContext) -> Polar:
        return cls(settings, context)

    def forward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        return to_polar(core, self.rate * np.asarray(t))

    def backward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        return from_polar(core, self.rate * np.asarray(t))

    def angle_rates(self, values: FloatArray, times: FloatArray) -> FloatArray:
        with np.errstate(invalid="ignore", divide="ignore"):
            return (values[..., 3] / values[..., 0] ** 2 - self.rate)[..., None]

    def singularity(self, states: FloatArray, t: float) -> str | None:
        return zero_radius(self.core(states))


def to_polar(core: FloatArray, turned: FloatArray) -> tuple[FloatArray, ...]:
    """(x, y, vx, vy) to (r, theta - turned, vr, L)."""
    x, y, vx, vy = core
    r = np.hypot(x, y)
    return r, wrap(np.arctan2(y, x) - turned), (x * vx + y * vy) / r, x * vy - y * vx


def from_polar(values: FloatArray, turned: FloatArray) -> tuple[FloatArray, ...]:
    """(r, theta - turned, vr, L) to (x, y, vx, vy); NaN where r <= 0."""
    r, angle, vr, momentum = values
    r = np.where(r > 0.0, r, np.nan)
    c, s = np.cos(angle + turned), np.sin(angle + turned)
    vt = momentum / r
    return r * c, r * s, vr * c - vt * s, vr * s + vt * c


def zero_radius(core: FloatArray) -> str | None:
    """The reason why a polar angle does not exist at some of (x, y, ...), or None."""
    r = np.hypot(core[0], core[1])
    if np.any(r <= 1e-9 * r.max(initial=0.0)):
        return f"the radius is {r.min():.3g} for a member, where the polar angle is undefined"
    return None
