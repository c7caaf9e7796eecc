"""Coordinates in which a state is expanded: those in which its flow is closest to linear."""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from pathlib import Path
from typing import ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict

from nipc.arrays import FloatArray
from nipc.errors import ChartError
from nipc.problem.charts.angles import circular_mean, unwrap, wrap


class Settings(BaseModel):
    """What a study says of its chart: one subclass a chart, told apart by `name`."""

    model_config = ConfigDict(extra="forbid", frozen=True)


@dataclass(frozen=True)
class ChartContext:
    """What a chart may know of its study: names and units of the state (d), its mean start."""

    state_names: tuple[str, ...]
    units: tuple[str, ...]
    start: FloatArray | None = None
    epoch: float = 0.0
    folder: Path | None = None


class Chart(ABC):
    """A one-to-one map between states (..., d) and chart values (..., d), which may move with time.

    A row where the chart is singular comes back as NaN and is for its caller to treat; `check`
    refuses a chart that is singular at the start, with the reason. A new chart is a file of its own
    beside `polar.py`, entered in `nipc.problem.charts.CHARTS`.
    """

    name: ClassVar[str]
    components: tuple[str, ...]
    units: tuple[str, ...]
    angles: tuple[int, ...] = ()

    @abstractmethod
    def from_state(self, states: FloatArray, t: FloatArray | float) -> FloatArray:
        """States (..., d) to chart values (..., d); t broadcasts to states.shape[:-1].

        Angles come back in [-pi, pi]; `unwrap` makes them continuous.
        """

    @abstractmethod
    def to_state(self, values: FloatArray, t: FloatArray | float) -> FloatArray:
        """Chart values (..., d), angles unwrapped or not, to states (..., d)."""

    def angle_rates(self, values: FloatArray, times: FloatArray) -> FloatArray:
        """Expected d/dt of each angle, (n, m, len(angles)); zero unless the chart knows better."""
        return np.zeros((*values.shape[:-1], len(self.angles)))

    def singularity(self, states: FloatArray, t: float) -> str | None:
        """Why the chart cannot hold these states (n, d), or None."""
        return None

    def unwrap(
        self,
        values: FloatArray,
        times: FloatArray | None = None,
        reference: FloatArray | None = None,
    ) -> FloatArray:
        """Values (n, m, d) with every angle continuous along time.

        The first time is brought nearest to `reference`, (n, d) or (d,), or else to the members'
        circular mean; later ones follow the chart's expected rate when `times` (m,) are given.
        """
        result = np.array(values)
        rates = None if times is None else self.angle_rates(values, times)
        for place, k in enumerate(self.angles):
            if rates is None or times is None:
                advance = np.zeros((values.shape[0], values.shape[1] - 1))
            else:
                rate = rates[..., place]
                advance = 0.5 * (rate[:, 1:] + rate[:, :-1]) * np.diff(times)
            near: FloatArray | float
            near = circular_mean(values[:, 0, k]) if reference is None else reference[..., k]
            result[..., k] = unwrap(values[..., k], advance, near)
        return result

    def check(self, states: FloatArray, t: float = 0.0) -> None:
        """Raise ChartError, with the reason, when the chart is singular among states (n, d)."""
        states = np.atleast_2d(np.asarray(states, float))
        if states.shape[-1] != len(self.components):
            raise ChartError(
                f"chart {self.name!r}: it has {len(self.components)} components,"
                f" but the state has {states.shape[-1]}"
            )
        if not np.all(np.isfinite(states)):
            raise ChartError(f"chart {self.name!r}: the start has values that are not finite")
        reason = self.singularity(states, t) or self._scattered(states, t)
        reason = reason or self._not_invertible(states, t)
        if reason is not None:
            raise ChartError(f"chart {self.name!r} cannot be used at this start: {reason}")

    def _scattered(self, states: FloatArray, t: float) -> str | None:
        values = self.from_state(states, t)
        for k in self.angles:
            away = np.abs(wrap(values[:, k] - circular_mean(values[:, k])))
            # beyond three quarters of a half turn the ensemble all but surrounds the singular point
            if away.size and np.nanmax(away, initial=0.0) > 0.75 * np.pi:
                return (
                    f"{self.components[k]} is spread over more than three quarters of the circle,"
                    " so that it has no single branch; choose a chart without this angle"
                )
        return None

    def _not_invertible(self, states: FloatArray, t: float) -> str | None:
        values = self.from_state(states, t)
        if not np.all(np.isfinite(values)):
            row, k = np.argwhere(~np.isfinite(values))[0]
            return f"{self.components[k]} is not finite at the state {states[row].tolist()}"
        back = self.to_state(values, t)
        size = np.abs(states).max(axis=0)
        off = np.abs(back - states).max(axis=0)
        if np.all(off <= 1e-8 * size):
            return None
        k = int(np.argmax(off / np.where(size > 0.0, size, 1.0)))
        return (
            f"going there and back changes state component {k + 1} by up to {off[k]:.3g}"
            f" (its size is {size[k]:.3g})"
        )
