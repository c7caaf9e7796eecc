"""Charts: interchangeable coordinates in which the states of an arc are expanded."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import numpy as np
from pydantic import Field

from nipc.arrays import FloatArray
from nipc.errors import ChartError
from nipc.problem.charts.action_angle import ActionAngle, ActionAngleSettings
from nipc.problem.charts.base import Chart, ChartContext
from nipc.problem.charts.cartesian import Cartesian, CartesianSettings
from nipc.problem.charts.classical_relative import ClassicalRelative, ClassicalRelativeSettings
from nipc.problem.charts.cylindrical import Cylindrical, CylindricalSettings
from nipc.problem.charts.equinoctial import Equinoctial, EquinoctialSettings
from nipc.problem.charts.functions import Functions, FunctionsSettings
from nipc.problem.charts.polar import Polar, PolarSettings
from nipc.problem.charts.rotating import Rotating, RotatingSettings

ChartSettings = Annotated[
    CartesianSettings
    | PolarSettings
    | CylindricalSettings
    | EquinoctialSettings
    | ClassicalRelativeSettings
    | ActionAngleSettings
    | RotatingSettings
    | FunctionsSettings,
    Field(discriminator="name"),
]

CHARTS = {
    chart.name: chart
    for chart in (
        Cartesian,
        Polar,
        Cylindrical,
        Equinoctial,
        ClassicalRelative,
        ActionAngle,
        Rotating,
        Functions,
    )
}


def build_chart(
    settings: ChartSettings | None,
    state_names: tuple[str, ...],
    units: tuple[str, ...],
    start: FloatArray | None = None,
    epoch: float = 0.0,
    folder: Path | None = None,
) -> Chart:
    """The chart that a study asks for; Cartesian when it asks for none.

    `start` (d,) is the mean start at time `epoch`, on which a relative chart's nominal orbit rests
    by default; `folder` is the study's, where the user's own functions lie. Raises ChartError when
    the chart does not fit the state.
    """
    if len(state_names) != len(units):
        raise ChartError(f"{len(units)} units for {len(state_names)} state components")
    settings = settings or CartesianSettings()
    mean = None if start is None else np.asarray(start, float)
    context = ChartContext(tuple(state_names), tuple(units), mean, epoch, folder)
    return CHARTS[settings.name].build(settings, context)  # type: ignore[arg-type]


__all__ = ["CHARTS", "Chart", "ChartContext", "ChartSettings", "build_chart"]
