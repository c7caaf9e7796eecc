"""Classical elements as differences from those of a nominal orbit."""

from __future__ import annotations

from typing import ClassVar, Literal

import numpy as np
from pydantic import Field

from nipc.arrays import FloatArray
from nipc.errors import ChartError
from nipc.problem.charts import kepler, orbit_plane
from nipc.problem.charts.angles import wrap
from nipc.problem.charts.base import ChartContext
from nipc.problem.charts.roles import RoleChart, RoleSettings


class ClassicalRelativeSettings(RoleSettings):
    name: Literal["classical_relative"]
    mu: float = Field(gt=0.0)
    nominal: tuple[float, ...] | None = None


class ClassicalRelative(RoleChart):
    """(a/a0 - 1, e cos w - e0 cos w0, e sin w - e0 sin w0, [i - i0, node - node0,] u - u0(t)).

    w and the mean argument of latitude u = w + M count from the ascending node, or from the first
    axis of a planar state. The nominal orbit is a state at the study's start, by default the mean
    start, moving by Kepler's law: u0(t) = u0 + n0 (t - epoch). Regular at zero eccentricity;
    an orbit in the reference plane has no node, and is refused.
    """

    name: ClassVar[str] = "classical_relative"
    Settings = ClassicalRelativeSettings

    def __init__(self, settings: ClassicalRelativeSettings, context: ChartContext) -> None:
        super().__init__(settings, context, dimensions=(2, 3))
        self.mu, self.epoch = settings.mu, context.epoch
        nominal = context.start if settings.nominal is None else np.array(settings.nominal)
        if nominal is None:
            raise ChartError(f"chart {self.name!r}: give `nominal`, a state on the nominal orbit")
        if nominal.shape != (len(context.state_names),):
            raise ChartError(
                f"chart {self.name!r}: `nominal` has {nominal.size} values"
                f" for a state of {len(context.state_names)}"
            )
        reason = self.singularity(nominal[None], self.epoch)
        if reason is not None:
            raise ChartError(f"chart {self.name!r}: the nominal orbit cannot be used: {reason}")
        tilt = ("inclination_offset", "node_offset") if self.dimension == 3 else ()
        self.label(
            ("axis_offset", "e_x_offset", "e_y_offset", *tilt, "latitude_offset"),
            ("1", "1", "1", *("rad" for _ in tilt), "rad"),
        )
        self.angles = (4, 5) if self.dimension == 3 else (3,)
        self._nominal = [float(v) for v in self._elements(self.core(nominal))]

    @classmethod
    def build(cls, settings: ClassicalRelativeSettings, context: ChartContext) -> ClassicalRelative:
        return cls(settings, context)

    def _elements(self, core: FloatArray) -> tuple[FloatArray, ...]:
        """(n, e_x, e_y, [i, node,] u) of positions and velocities."""
        if self.dimension == 2:
            return kepler.to_mean(self.mu, core)
        tilt, node = orbit_plane.inclination(core), orbit_plane.node(core)
        plane = _along_node(core, tilt, node)
        n, ex, ey, u = kepler.to_mean(self.mu, plane)
        return n, ex, ey, tilt, node, u

    def _advance(self, t: FloatArray | float) -> FloatArray:
        return self._nominal[-1] + self._nominal[0] * (np.asarray(t) - self.epoch)

    def forward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        n, ex, ey, *tilt, u = self._elements(core)
        n0, ex0, ey0, *tilt0, _ = self._nominal
        axis = np.cbrt((n0 / n) ** 2) - 1.0
        turns = [wrap(own - nominal) for own, nominal in zip(tilt, tilt0, strict=True)]
        return (axis, ex - ex0, ey - ey0, *turns, wrap(u - self._advance(t)))

    def backward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        axis, ex, ey, *turns, u = core
        n0, ex0, ey0, *tilt0, _ = self._nominal
        n = n0 / np.sqrt(1.0 + axis) ** 3
        plane = kepler.from_mean(self.mu, n, ex + ex0, ey + ey0, u + self._advance(t))
        if self.dimension == 2:
            return plane
        tilt, node = (own + nominal for own, nominal in zip(turns, tilt0, strict=True))
        first, second = _node_axes(tilt, node)
        x, y, vx, vy = plane
        return (*(x * first + y * second), *(vx * first + vy * second))

    def angle_rates(self, values: FloatArray, times: FloatArray) -> FloatArray:
        n0 = self._nominal[0]
        rates = np.zeros((*values.shape[:-1], len(self.angles)))
        with np.errstate(invalid="ignore", divide="ignore"):
            rates[..., -1] = n0 * ((1.0 + values[..., 0]) ** -1.5 - 1.0)
        return rates

    def singularity(self, states: FloatArray, t: float) -> str | None:
        core = self.core(states)
        if self.dimension == 3:
            tilt = orbit_plane.inclination(core)
            if np.any(~(np.sin(tilt) > 1e-3)):
                return (
                    "a member's orbit lies in the reference plane, or is a straight line, and has"
                    ' no node; the chart "equinoctial" is regular there'
                )
            core = _along_node(core, tilt, orbit_plane.node(core))
        elif np.any(core[0] * core[3] < core[1] * core[2]):
            return 'a member turns clockwise; the chart "equinoctial" has retrograde = true'
        return kepler.unusable_orbit(self.mu, core, closed=True)


def _node_axes(tilt: FloatArray, node: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Unit vectors (3, ...) along the ascending node and a quarter turn ahead of it."""
    c, s = np.cos(node), np.sin(node)
    first = np.stack([c, s, np.zeros_like(c)])
    second = np.stack([-s * np.cos(tilt), c * np.cos(tilt), np.sin(tilt)])
    return first, second


def _along_node(core: FloatArray, tilt: FloatArray, node: FloatArray) -> FloatArray:
    """(x, y, vx, vy) in the orbit's plane, x along the ascending node."""
    axes = _node_axes(tilt, node)
    return np.stack(
        [np.sum(vector * axis, axis=0) for vector in (core[:3], core[3:]) for axis in axes]
    )
