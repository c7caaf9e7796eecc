"""g(t, x): the direction in which a noise source kicks the state.

A kick moves x along g: dx = g(t, x) dw. Built in: one state component, the radial, transverse and
normal axes of an orbit, the direction of the velocity, and a function of the user's.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Annotated, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, model_validator

from nipc.adapters.reference import Reference, check_reference, load_function
from nipc.arrays import FloatArray
from nipc.errors import InputError, PropagatorError

Direction = Callable[[float, FloatArray, FloatArray], FloatArray]
Names = Annotated[tuple[str, ...], Field(min_length=2, max_length=3)]


class Kick(BaseModel):
    """Where a noise source kicks: give one of component, axis, function.

    axis "radial", "transverse", "normal" (of the orbit, from `position` and `velocity`) or
    "velocity" kick the velocity. `function` is module:function of (t, x (n, d), parameters (n, P))
    -> (n, d). `scale` multiplies: a noise in km/s^2 beside a clock in days and velocities in km/s
    needs 86400, the seconds of a day.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    source: str
    component: str | None = None
    axis: Literal["radial", "transverse", "normal", "velocity"] | None = None
    function: Reference | None = None
    position: Names | None = None
    velocity: Names | None = None
    scale: float = Field(default=1.0, allow_inf_nan=False)

    @model_validator(mode="after")
    def _one(self) -> Kick:
        given = [k for k in ("component", "axis", "function") if getattr(self, k) is not None]
        if len(given) != 1:
            raise ValueError("give one of component, axis, function")
        if self.axis is not None:
            needed = ("velocity",) if self.axis == "velocity" else ("position", "velocity")
            for key in needed:
                if getattr(self, key) is None:
                    raise ValueError(
                        f'axis = "{self.axis}" needs {key}: the names of its state components'
                    )
            if self.position and self.velocity and len(self.position) != len(self.velocity):
                raise ValueError("position and velocity must have as many components")
            if self.axis == "normal" and self.velocity is not None and len(self.velocity) != 3:
                raise ValueError("a motion in a plane has no normal axis to be kicked along")
        return self

    def check(self, state_names: tuple[str, ...], folder: Path) -> None:
        """Raise InputError when it names no state component or no module."""
        named = [self.component] if self.component else []
        for name in [*named, *(self.position or ()), *(self.velocity or ())]:
            if name not in state_names:
                raise InputError(
                    f"kick of {self.source!r}: {name!r} is no state component; known: "
                    + ", ".join(state_names)
                )
        if self.function is not None:
            check_reference(folder, self.function)

    def direction(self, state_names: tuple[str, ...], folder: Path) -> Direction:
        """g(t, x (n, d), parameters (n, P)) -> (n, d), `scale` in it."""
        if self.function is not None:
            return _users(load_function(folder, self.function), self.scale)
        if self.component is not None:
            unit = np.zeros(len(state_names))
            unit[state_names.index(self.component)] = self.scale
            return lambda t, x, p: np.broadcast_to(unit, x.shape)
        velocity = [state_names.index(name) for name in self.velocity or ()]
        position = [state_names.index(name) for name in self.position or ()]
        axis, scale = self.axis, self.scale

        def along(t: float, x: FloatArray, p: FloatArray) -> FloatArray:
            r, v = x[:, position], x[:, velocity]
            result = np.zeros(x.shape)
            result[:, velocity] = scale * orbit_axis(str(axis), r, v)
            return result

        return along


def orbit_axis(axis: str, r: FloatArray, v: FloatArray) -> FloatArray:
    """Unit vectors (n, 2 or 3) along an axis of the orbit through position r with velocity v.

    radial r/|r|, normal r x v/|r x v|, transverse = normal x radial; velocity v/|v|.
    """
    if axis == "velocity":
        return _unit(v, "the velocity is zero")
    radial = _unit(r, "the position is zero")
    if axis == "radial":
        return radial
    if r.shape[1] == 2:
        sense = np.sign(r[:, 0] * v[:, 1] - r[:, 1] * v[:, 0])
        return sense[:, None] * np.stack([-radial[:, 1], radial[:, 0]], axis=1)
    normal = _unit(np.cross(r, v), "position and velocity are along one line")
    return normal if axis == "normal" else np.cross(normal, radial)


def _unit(vectors: FloatArray, why: str) -> FloatArray:
    length = np.linalg.norm(vectors, axis=1, keepdims=True)
    if np.any(length == 0):
        raise PropagatorError(f"a kick has no direction: {why}")
    return vectors / length


def _users(function: Callable[..., object], scale: float) -> Direction:
    def direction(t: float, x: FloatArray, p: FloatArray) -> FloatArray:
        value = np.asarray(function(t, x, p), dtype=float)
        if value.shape != x.shape:
            raise PropagatorError(
                f"the kick's function returned shape {value.shape}; it must be {x.shape}"
            )
        return scale * value

    return direction
