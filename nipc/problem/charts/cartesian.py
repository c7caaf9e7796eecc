"""The state itself."""

from __future__ import annotations

from typing import ClassVar, Literal

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.charts.base import Chart, ChartContext, Settings


class CartesianSettings(Settings):
    name: Literal["cartesian"] = "cartesian"


class Cartesian(Chart):
    """z = x, for a state of any size and meaning."""

    name: ClassVar[str] = "cartesian"
    Settings = CartesianSettings

    def __init__(self, context: ChartContext) -> None:
        self.components, self.units = context.state_names, context.units

    @classmethod
    def build(cls, settings: CartesianSettings, context: ChartContext) -> Cartesian:
        return cls(context)

    def from_state(self, states: FloatArray, t: FloatArray | float) -> FloatArray:
        return np.array(states, dtype=float)

    def to_state(self, values: FloatArray, t: FloatArray | float) -> FloatArray:
        return np.array(values, dtype=float)
