"""A pair of functions of the user's."""

from __future__ import annotations

import importlib
import importlib.util
from collections.abc import Callable
from pathlib import Path
from typing import ClassVar, Literal

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import ChartError
from nipc.problem.charts.base import Chart, ChartContext, Settings

Map = Callable[[FloatArray, float], FloatArray]


class FunctionsSettings(Settings):
    name: Literal["functions"]
    from_state: str
    to_state: str
    components: tuple[str, ...]
    units: tuple[str, ...] | None = None
    angles: tuple[str, ...] = ()


class Functions(Chart):
    """from_state(states, t) and to_state(values, t), each (n, d) and a time to (n, d).

    Named as `module:function`; the module is a file beside the study, or an installed one. The
    functions must be each other's inverse; `check` tries that on the start.
    """

    name: ClassVar[str] = "functions"
    Settings = FunctionsSettings

    def __init__(self, settings: FunctionsSettings, context: ChartContext) -> None:
        self.components = settings.components
        self.units = settings.units or ("1",) * len(settings.components)
        if len(self.components) != len(context.state_names):
            raise ChartError(
                f"chart {self.name!r}: {len(self.components)} components for a state of"
                f" {len(context.state_names)}; a chart keeps the number"
            )
        if len(self.units) != len(self.components):
            raise ChartError(
                f"chart {self.name!r}: {len(self.units)} units"
                f" for {len(self.components)} components"
            )
        for angle in settings.angles:
            if angle not in self.components:
                raise ChartError(f"chart {self.name!r}: the angle {angle!r} is no component of it")
        self.angles = tuple(self.components.index(a) for a in settings.angles)
        self._forward = _load(settings.from_state, context.folder)
        self._backward = _load(settings.to_state, context.folder)

    @classmethod
    def build(cls, settings: FunctionsSettings, context: ChartContext) -> Functions:
        return cls(settings, context)

    def from_state(self, states: FloatArray, t: FloatArray | float) -> FloatArray:
        return _apply(self._forward, np.asarray(states, float), t)

    def to_state(self, values: FloatArray, t: FloatArray | float) -> FloatArray:
        return _apply(self._backward, np.asarray(values, float), t)


def _apply(function: Map, points: FloatArray, t: FloatArray | float) -> FloatArray:
    """Call for one time after another: the user's function need not broadcast."""
    if np.ndim(t) == 0:
        flat = points.reshape(-1, points.shape[-1])
        result = _call(function, flat, float(t))
        return result.reshape(points.shape)
    times = np.broadcast_to(t, points.shape[:-1])
    result = np.empty_like(points)
    for value in np.unique(times):
        here = times == value
        result[here] = _call(function, points[here], float(value))
    return result


def _call(function: Map, points: FloatArray, t: float) -> FloatArray:
    with np.errstate(all="ignore"):
        result = np.asarray(function(points.copy(), t), float)
    if result.shape != points.shape:
        name = getattr(function, "__name__", "the function")
        raise ChartError(
            f"chart 'functions': {name} gave an array of shape {result.shape} for {points.shape}"
        )
    return result


def _load(name: str, folder: Path | None) -> Map:
    module_name, _, function_name = name.partition(":")
    if not module_name or not function_name:
        raise ChartError(f"chart 'functions': {name!r} is not of the form module:function")
    file = None if folder is None else folder / f"{module_name}.py"
    try:
        if file is not None and file.is_file():
            spec = importlib.util.spec_from_file_location(module_name, file)
            assert spec is not None
            assert spec.loader is not None
            module = importlib.util.module_from_spec(spec)
            spec.loader.exec_module(module)
        else:
            module = importlib.import_module(module_name)
    except Exception as error:
        raise ChartError(
            f"chart 'functions': {module_name!r} cannot be imported: {error}"
        ) from error
    function = getattr(module, function_name, None)
    if not callable(function):
        raise ChartError(f"chart 'functions': {module_name!r} has no function {function_name!r}")
    return function
