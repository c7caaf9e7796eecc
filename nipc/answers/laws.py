"""How a variance may grow: laws V(x) of the time x from 0 to 1 over the horizon.

Every law is scaled by the variance at the end, so that its parameters are of order one. Bounds keep
a law to what its name says: a plateau has to be seen, an exponential to grow by more than e^3.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import ClassVar

import numpy as np

from nipc.arrays import FloatArray

KINDS = ("bounded", "power", "exponential")


class Law(ABC):
    """V(x) / V(1) for parameters theta within `low` and `high`; tried from each of `starts`."""

    name: ClassVar[str]
    kind: ClassVar[str]
    parameters: ClassVar[tuple[str, ...]]
    low: ClassVar[tuple[float, ...]]
    high: ClassVar[tuple[float, ...]]
    starts: ClassVar[tuple[tuple[float, ...], ...]]

    @abstractmethod
    def __call__(self, x: FloatArray, theta: FloatArray) -> FloatArray:
        """Positive values of the shape of x."""


class Constant(Law):
    """V = P."""

    name, kind = "constant", "bounded"
    parameters = ("log_plateau",)
    low, high = (-50.0,), (50.0,)
    starts = ((0.0,),)

    def __call__(self, x: FloatArray, theta: FloatArray) -> FloatArray:
        return np.full_like(x, np.exp(theta[0]))


class Saturating(Law):
    """V = P (1 - (1 - c) exp(-x / tau)), tau at most a third of the horizon."""

    name, kind = "plateau", "bounded"
    parameters = ("log_plateau", "start", "log_tau")
    low, high = (-50.0, 0.0, np.log(1e-3)), (50.0, 3.0, np.log(1.0 / 3.0))
    starts = ((0.0, 0.1, np.log(0.05)), (0.0, 0.1, np.log(0.2)), (0.0, 1.5, np.log(0.1)))

    def __call__(self, x: FloatArray, theta: FloatArray) -> FloatArray:
        rest = (1.0 - theta[1]) * np.exp(-x / np.exp(theta[2]))
        return np.asarray(np.exp(theta[0]) * np.maximum(1.0 - rest, 1e-300))


class Linear(Law):
    """V = 2 D x."""

    name, kind = "linear", "power"
    parameters = ("log_growth",)
    low, high = (-50.0,), (50.0,)
    starts = ((0.0,),)

    def __call__(self, x: FloatArray, theta: FloatArray) -> FloatArray:
        return np.asarray(np.exp(theta[0]) * x)


class LinearOffset(Law):
    """V = A + 2 D x."""

    name, kind = "linear from an offset", "power"
    parameters = ("offset", "log_growth")
    low, high = (0.0, -50.0), (10.0, 50.0)
    starts = ((0.1, 0.0), (0.5, -1.0), (1e-4, 0.0))

    def __call__(self, x: FloatArray, theta: FloatArray) -> FloatArray:
        return np.asarray(theta[0] + np.exp(theta[1]) * x)


class Power(Law):
    """V = 2 D x^alpha."""

    name, kind = "power", "power"
    parameters = ("log_growth", "alpha")
    low, high = (-50.0, 0.05), (50.0, 8.0)
    starts = ((0.0, 0.5), (0.0, 1.0), (0.0, 2.0), (0.0, 3.0))

    def __call__(self, x: FloatArray, theta: FloatArray) -> FloatArray:
        return np.asarray(np.exp(theta[0]) * x ** theta[1])


class PowerOffset(Law):
    """V = A + 2 D x^alpha."""

    name, kind = "power from an offset", "power"
    parameters = ("offset", "log_growth", "alpha")
    low, high = (0.0, -50.0, 0.05), (10.0, 50.0, 8.0)
    starts = tuple((a, np.log1p(-a), p) for a in (1e-4, 0.1, 0.6) for p in (0.6, 1.0, 2.0, 3.0))

    def __call__(self, x: FloatArray, theta: FloatArray) -> FloatArray:
        return np.asarray(theta[0] + np.exp(theta[1]) * x ** theta[2])


class Exponential(Law):
    """V = A exp(2 lambda x)."""

    name, kind = "exponential", "exponential"
    parameters = ("log_end", "growth")
    low, high = (-50.0, 3.0), (50.0, 1000.0)
    starts = ((0.0, 4.0), (0.0, 8.0), (0.0, 20.0), (0.0, 60.0))

    def __call__(self, x: FloatArray, theta: FloatArray) -> FloatArray:
        return np.asarray(np.exp(theta[0] + theta[1] * (x - 1.0)))


class Logistic(Law):
    """V = P / (1 + (P/A - 1) exp(-2 lambda x)): exponential until it saturates, P/A above e^3."""

    name, kind = "exponential, then a plateau", "exponential"
    parameters = ("log_plateau", "log_ratio", "growth")
    low, high = (-50.0, 3.0, 3.0), (50.0, 300.0, 2000.0)
    starts = tuple((0.0, r, g) for r in (5.0, 15.0) for g in (8.0, 20.0, 60.0))

    def __call__(self, x: FloatArray, theta: FloatArray) -> FloatArray:
        return np.asarray(np.exp(theta[0] - np.logaddexp(0.0, theta[1] - theta[2] * x)))


LAWS: tuple[Law, ...] = (
    Constant(),
    Saturating(),
    Linear(),
    LinearOffset(),
    Power(),
    PowerOffset(),
    Exponential(),
    Logistic(),
)
