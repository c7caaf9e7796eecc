"""Action and angle of a separable quadratic part."""

from __future__ import annotations

from typing import ClassVar, Literal

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.charts.angles import wrap
from nipc.problem.charts.base import ChartContext
from nipc.problem.charts.roles import RoleChart, RoleSettings
from nipc.problem.charts.rotating import oscillator_frequencies


class ActionAngleSettings(RoleSettings):
    name: Literal["action_angle"]
    frequencies: tuple[float, ...]


class ActionAngle(RoleChart):
    """J = (v^2 + w^2 x^2) / 2w and phase = atan2(w x, v) - w t for H = sum v^2/2 + w^2 x^2/2.

    x = sqrt(2J/w) sin(phase + wt), v = sqrt(2Jw) cos(phase + wt). Shear, a frequency that depends
    on the amplitude, is linear here where it is a spiral in x and v. Singular at zero action: there
    use `Rotating`, which is regular and freezes the linear motion just as well.
    """

    name: ClassVar[str] = "action_angle"
    Settings = ActionAngleSettings

    def __init__(self, settings: ActionAngleSettings, context: ChartContext) -> None:
        super().__init__(settings, context, dimensions=tuple(range(1, 100)))
        self.frequencies = oscillator_frequencies(self, settings.frequencies, zero=False)
        self._w = np.array(self.frequencies)
        positions, _ = self.role_names()
        self.label(
            tuple(f"action_{n}" for n in positions) + tuple(f"phase_{n}" for n in positions),
            (f"{self.length_unit} {self.speed_unit}",) * self.dimension + ("rad",) * self.dimension,
        )
        self.angles = tuple(range(self.dimension, 2 * self.dimension))

    @classmethod
    def build(cls, settings: ActionAngleSettings, context: ChartContext) -> ActionAngle:
        return cls(settings, context)

    def forward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        actions, phases = [], []
        for k, w in enumerate(self.frequencies):
            x, v = core[k], core[k + self.dimension]
            actions.append((v**2 + (w * x) ** 2) / (2.0 * w))
            phases.append(wrap(np.arctan2(w * x, v) - w * np.asarray(t)))
        return (*actions, *phases)

    def backward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        positions, velocities = [], []
        for k, w in enumerate(self.frequencies):
            amplitude = np.sqrt(2.0 * core[k] * w)
            angle = core[k + self.dimension] + w * np.asarray(t)
            positions.append(amplitude * np.sin(angle) / w)
            velocities.append(amplitude * np.cos(angle))
        return (*positions, *velocities)

    def singularity(self, states: FloatArray, t: float) -> str | None:
        core = self.core(states)
        positions, _ = self.role_names()
        for k, w in enumerate(self.frequencies):
            size = np.hypot(w * core[k], core[k + self.dimension])
            if np.any(size <= 1e-9 * size.max(initial=0.0)):
                return (
                    f"the action of {positions[k]!r} is zero for a member, and its angle undefined;"
                    ' the chart "rotating" is regular there'
                )
        return None
