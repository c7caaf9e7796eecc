"""Equinoctial elements of a planar or spatial orbit."""

from __future__ import annotations

from typing import ClassVar, Literal

import numpy as np
from pydantic import Field

from nipc.arrays import FloatArray
from nipc.problem.charts import kepler, orbit_plane
from nipc.problem.charts.angles import wrap
from nipc.problem.charts.base import ChartContext
from nipc.problem.charts.roles import RoleChart, RoleSettings


class EquinoctialSettings(RoleSettings):
    name: Literal["equinoctial"]
    mu: float = Field(gt=0.0)
    anomaly: Literal["mean", "true"] = "mean"
    rotation_rate: float = 0.0
    retrograde: bool = False


class Equinoctial(RoleChart):
    """(n, e_x, e_y, longitude - rate t), in space with h, k = tan(i/2) (cos, sin)(node) before it.

    With the mean longitude the size is the mean motion n = sqrt(mu/a^3): Kepler's flow is then
    exactly linear, longitude' = n - rate and all else constant; only closed orbits have it. With
    the true longitude the size is the semi-latus rectum p, and open orbits are held too. Both are
    regular at zero eccentricity and inclination, and singular at an inclination of 180 deg, which
    `retrograde` moves to 0 (half a turn of the frame about its first axis).
    """

    name: ClassVar[str] = "equinoctial"
    Settings = EquinoctialSettings

    def __init__(self, settings: EquinoctialSettings, context: ChartContext) -> None:
        super().__init__(settings, context, dimensions=(2, 3))
        self.mu, self.rate = settings.mu, settings.rotation_rate
        self.mean, self.retrograde = settings.anomaly == "mean", settings.retrograde
        size = ("mean_motion", f"rad {self.rate_unit}")
        if not self.mean:
            size = ("semilatus_rectum", self.length_unit)
        tilt = ("h", "k") if self.dimension == 3 else ()
        self.label(
            (size[0], "e_x", "e_y", *tilt, f"{settings.anomaly}_longitude"),
            (size[1], "1", "1", *("1" for _ in tilt), "rad"),
        )
        self.angles = (2 * self.dimension - 1,)

    @classmethod
    def build(cls, settings: EquinoctialSettings, context: ChartContext) -> Equinoctial:
        return cls(settings, context)

    def _prograde(self, core: FloatArray) -> FloatArray:
        """Positions and velocities after half a turn about the first axis, if asked for."""
        if not self.retrograde:
            return core
        half_turn = np.array([1.0, -1.0] if self.dimension == 2 else [1.0, -1.0, -1.0])
        return np.asarray(core * np.tile(half_turn, 2).reshape(-1, *(1,) * (core.ndim - 1)))

    def _turned(self, t: FloatArray | float) -> FloatArray:
        return (-self.rate if self.retrograde else self.rate) * np.asarray(t)

    def forward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        core = self._prograde(core)
        tilt: tuple[FloatArray, ...] = ()
        if self.dimension == 3:
            tilt = orbit_plane.tangents(core)
            core = orbit_plane.into_plane(core, *tilt)
        elements = kepler.to_mean if self.mean else kepler.to_true
        size, ex, ey, longitude = elements(self.mu, core)
        return (size, ex, ey, *tilt, wrap(longitude - self._turned(t)))

    def backward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        size, ex, ey, *tilt, longitude = core
        state = kepler.from_mean if self.mean else kepler.from_true
        plane = state(self.mu, size, ex, ey, longitude + self._turned(t))
        if self.dimension == 3:
            plane = orbit_plane.out_of_plane(plane, *tilt)
        return tuple(self._prograde(np.stack(plane)))

    def angle_rates(self, values: FloatArray, times: FloatArray) -> FloatArray:
        size, ex, ey, longitude = (values[..., k] for k in (0, 1, 2, self.angles[0]))
        if self.mean:
            own = size
        else:
            true = longitude + self._turned(times)
            ratio = 1.0 + ex * np.cos(true) + ey * np.sin(true)
            with np.errstate(invalid="ignore"):
                own = np.sqrt(self.mu / size**3) * ratio**2
        return np.asarray(own - self._turned(1.0))[..., None]

    def singularity(self, states: FloatArray, t: float) -> str | None:
        core = self._prograde(self.core(states))
        if self.dimension == 3:
            speed = np.sqrt(np.sum(core[3:] ** 2, axis=0))
            radius = np.sqrt(np.sum(core[:3] ** 2, axis=0))
            along = np.abs(np.sum(core[:3] * core[3:], axis=0))
            if np.any(along >= (1.0 - 1e-12) * radius * speed):
                return "a member moves straight towards or away from the centre, or is at rest"
            tilt = np.degrees(orbit_plane.inclination(core).max())
            if tilt > 177.0:
                shown = 180.0 - tilt if self.retrograde else tilt
                return (
                    f"a member's inclination is {shown:.4g} deg, near the chart's singular"
                    f" direction; set retrograde = {'false' if self.retrograde else 'true'}"
                )
            core = orbit_plane.into_plane(core, *orbit_plane.tangents(core))
        elif np.any(core[0] * core[3] < core[1] * core[2]):
            turning = "counter-clockwise" if self.retrograde else "clockwise"
            return (
                f"a member turns {turning};"
                f" set retrograde = {'false' if self.retrograde else 'true'}"
            )
        return kepler.unusable_orbit(self.mu, core, closed=self.mean)
