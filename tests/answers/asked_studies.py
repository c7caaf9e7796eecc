"""Small solved studies to ask questions of; their motions have closed forms."""

from __future__ import annotations

from pathlib import Path

import nipc
from nipc.problem.study import Study

BROWNIAN = """\
title = "two pushed coordinates"
seed = 11
[propagator]
adapter = "ode"
rhs = "motion:rates"
batch = true
method = "rk4"
step = 0.25
[clock]
end = 4.0
outputs = 9
[[state]]
name = "x"
std = 0.3
[[state]]
name = "y"
[[state]]
name = "still"
mean = 2.0
[[noise]]
name = "push"
unit = "m/s^0.5"
intensity = 0.25
terms = 4
[[noise]]
name = "pull"
intensity = 0.1
terms = 4
[[quantity]]
name = "x"
unit = "m"
box = [-1.0, 1.0]
[[quantity]]
name = "square"
expression = "y**2"
[[quantity]]
name = "still"
[ensemble]
members = 8000
[check]
runs = 4
"""
RATES = """\
import numpy as np

def rates(t, x, xi, parameters):
    return np.stack([xi[:, 0] + xi[:, 1], xi[:, 0], 0 * x[:, 0]], axis=1)
"""


def brownian(folder: Path, text: str = BROWNIAN) -> Study:
    """x' = push + pull, y' = push, from x ~ N(0, 0.3^2)."""
    folder.mkdir(exist_ok=True)
    (folder / "motion.py").write_text(RATES)
    (folder / "study.toml").write_text(text)
    return nipc.load_study(folder / "study.toml")


def variance(start: float, push: float, pull: float, t: float = 4.0) -> float:
    """Of x at t with each of its drivers scaled."""
    return (0.3 * start) ** 2 + ((0.25 * push) ** 2 + (0.1 * pull) ** 2) * t


SPRING = """\
title = "softening spring"
seed = 4
tolerance = 0.02
[propagator]
adapter = "ode"
rhs = "spring:rates"
batch = true
method = "rk4"
step = 0.1
[clock]
end = 12.0
outputs = 13
period = 6.3
[[state]]
name = "x"
mean = 0.5
std = 0.05
[[state]]
name = "v"
[[noise]]
name = "force"
intensity = 0.02
[[noise]]
name = "draught"
kind = "gauss-markov"
time_constant = 2.0
intensity = 0.02
[[quantity]]
name = "x"
box = [-0.6, 0.6]
[chain]
arcs = 6
[ensemble]
members = 4096
[check]
runs = 6
"""
SPRING_RATES = """\
import numpy as np

def rates(t, x, xi, parameters):
    force = xi[:, 0] + xi[:, 1]
    return np.stack([x[:, 1], -x[:, 0] + 0.3 * x[:, 0] ** 3 + force], axis=1)
"""


def spring(folder: Path, text: str = SPRING) -> Study:
    """x'' = -x + 0.3 x^3 + white force + Gauss-Markov draught, over six arcs."""
    folder.mkdir(exist_ok=True)
    (folder / "spring.py").write_text(SPRING_RATES)
    (folder / "study.toml").write_text(text)
    return nipc.load_study(folder / "study.toml")
