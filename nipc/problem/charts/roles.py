"""Which components of a state are positions and which are velocities."""

from __future__ import annotations

from abc import abstractmethod

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import ChartError
from nipc.problem.charts.base import Chart, ChartContext, Settings


class RoleSettings(Settings):
    """Without roles, the first half of the state are positions and the second their velocities."""

    position: tuple[str, ...] | None = None
    velocity: tuple[str, ...] | None = None


class RoleChart(Chart):
    """A chart of positions and velocities; other components of the state pass through behind."""

    def __init__(self, settings: RoleSettings, context: ChartContext, dimensions: tuple[int, ...]):
        names = context.state_names
        position, velocity = _roles(self.name, settings, names)
        if len(position) not in dimensions or len(position) != len(velocity):
            wanted = " or ".join(str(d) for d in dimensions)
            raise ChartError(
                f"chart {self.name!r}: it needs {wanted} positions and as many velocities,"
                f" not {len(position)} and {len(velocity)}"
            )
        self.dimension = len(position)
        self._roles = np.array([names.index(n) for n in (*position, *velocity)])
        self._others = np.array([k for k in range(len(names)) if k not in self._roles], dtype=int)
        self._order = np.argsort(np.concatenate([self._roles, self._others]))
        self._context = context
        self.length_unit = context.units[self._roles[0]]
        self.speed_unit = context.units[self._roles[-1]]

    @property
    def rate_unit(self) -> str:
        """Speed over length: 1/s for km/s and km."""
        length, _, time = self.speed_unit.partition("/")
        if length.strip() == self.length_unit and time:
            return f"1/{time.strip()}"
        return f"({self.speed_unit})/({self.length_unit})"

    def role_names(self) -> tuple[tuple[str, ...], tuple[str, ...]]:
        """Names of the positions and of the velocities."""
        names = [self._context.state_names[k] for k in self._roles]
        return tuple(names[: self.dimension]), tuple(names[self.dimension :])

    def label(self, components: tuple[str, ...], units: tuple[str, ...]) -> None:
        """Name the chart's own components; the components that pass through keep their names."""
        self.components = components + tuple(self._context.state_names[k] for k in self._others)
        self.units = units + tuple(self._context.units[k] for k in self._others)

    def core(self, states: FloatArray) -> FloatArray:
        """Positions, then velocities: states (..., d) to (2 x dimension, ...)."""
        return np.moveaxis(np.asarray(states, float)[..., self._roles], -1, 0)

    @abstractmethod
    def forward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        """The chart's own components from positions and velocities, (2 x dimension, ...)."""

    @abstractmethod
    def backward(self, core: FloatArray, t: FloatArray | float) -> tuple[FloatArray, ...]:
        """Positions and velocities from the chart's own components, (2 x dimension, ...)."""

    def from_state(self, states: FloatArray, t: FloatArray | float) -> FloatArray:
        states = np.asarray(states, float)
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            own = np.stack(self.forward(self.core(states), t), axis=-1)
        return np.concatenate([own, states[..., self._others]], axis=-1)

    def to_state(self, values: FloatArray, t: FloatArray | float) -> FloatArray:
        values = np.asarray(values, float)
        own = np.moveaxis(values[..., : self._roles.size], -1, 0)
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            core = np.stack(self.backward(own, t), axis=-1)
        joined = np.concatenate([core, values[..., self._roles.size :]], axis=-1)
        return joined[..., self._order]


def _roles(
    chart: str, settings: RoleSettings, names: tuple[str, ...]
) -> tuple[tuple[str, ...], tuple[str, ...]]:
    position, velocity = settings.position, settings.velocity
    if position is None and velocity is None:
        half = len(names) // 2
        if len(names) % 2:
            raise ChartError(
                f"chart {chart!r}: a state of {len(names)} components is not positions and"
                " velocities alone; name them with `position` and `velocity`"
            )
        return names[:half], names[half:]
    if position is None or velocity is None:
        raise ChartError(f"chart {chart!r}: give both `position` and `velocity`, or neither")
    named = (*position, *velocity)
    unknown = [n for n in named if n not in names]
    if unknown:
        raise ChartError(
            f"chart {chart!r}: {unknown[0]!r} is no component of the state ({', '.join(names)})"
        )
    if len(set(named)) != len(named):
        raise ChartError(f"chart {chart!r}: a component is named twice in {', '.join(named)}")
    return position, velocity
