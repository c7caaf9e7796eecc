"""How far the covariance of kicked motions is from the forced one; for tests and benchmarks."""

import tempfile
from pathlib import Path

import numpy as np
from adapters_samples import build, context
from scipy.linalg import expm

from nipc.problem.noise import Legendre, NoiseModel, Source
from nipc.runs.propagator import Batch

TERMS = 12
SLOT_WATCH = Path(__file__).parents[2] / "examples" / "slot_watch"


def apart(covariance, exact):
    """Largest difference of two covariances, each entry beside the product of its deviations."""
    scale = np.sqrt(np.diag(exact))
    return float(np.abs((covariance - exact) / np.outer(scale, scale)).max())


def van_loan(a, b, t):
    """int_0^t e^(A s) B B' e^(A' s) ds for A (d, d), B (d, J): one exponential (Van Loan 1978)."""
    d = a.shape[0]
    block = np.block([[-a, b @ b.T], [np.zeros((d, d)), a.T]])
    big = expm(block * t)
    return big[d:, d:].T @ big[:d, d:]


def unit_germs(names, intensities, end, start):
    """Runs from one start, the first without noise and then one a germ variable, at size 1.

    Of a motion that is linear in the noise the sum of squares of what each adds is the covariance.
    """
    model = NoiseModel(
        tuple(Source(n, "", i) for n, i in zip(names, intensities, strict=True)),
        (Legendre(TERMS),) * len(names), 0.0, end,
    )  # fmt: skip
    germ = np.vstack([np.zeros((1, model.size)), np.eye(model.size)])
    states = np.repeat(np.atleast_2d(start), len(germ), axis=0)
    times = np.array([0.0, end])
    return Batch(states, times, model.realise(germ), np.empty((len(germ), 0)))


def covariance_of(states):
    moved = states[1:, -1] - states[0, -1]
    return moved.T @ moved


CW = """
import numpy as np
from scipy.linalg import expm
A = np.array([[0, 0, 1, 0], [0, 0, 0, 1], [3, 0, 0, 2], [0, 0, -2, 0]], float)
def move(x0, times, forcing, p):
    return np.stack([x0 @ expm(A * (t - times[0])).T for t in times], axis=1)
"""


def clohessy_wiltshire_error(legs):
    """A quarter period at mean motion 1, against Van Loan's exponential of the forced motion."""
    names, intensities, end = ("radial", "along"), (0.7, 0.4), np.pi / 2
    batch = unit_germs(names, intensities, end, np.zeros(4))
    kick = ({"source": "radial", "component": "vx"}, {"source": "along", "component": "vy"})
    inner = {"adapter": "function", "function": "clohessy_wiltshire:move", "batch": True}
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "clohessy_wiltshire.py").write_text(CW)
        where = context(folder, ("x", "y", "vx", "vy"), (), names)
        kicked = build("kicks", folder, where, propagator=inner, kick=kick, legs=legs)
        found = covariance_of(kicked.propagate(batch).states)
    a = np.array([[0, 0, 1, 0], [0, 0, 0, 1], [3, 0, 0, 2], [0, 0, -2, 0]], float)
    return apart(found, van_loan(a, np.diag([0, 0, *intensities])[:, 2:], end))


STILL = """
def still(t, x, xi, parameters):
    return rates(t, x, np.zeros((len(x), 2)), parameters)
"""


def geostationary_error(legs):
    """A quarter day of the slot watch, its two accelerations as kicks and as a path."""
    names, states = ("radial", "tangential"), ("x", "y", "vx", "vy")
    per_day = np.array([2.0e-8, 3.0e-9]) / np.sqrt(86400.0)  # km/s^2 per square root of a day
    batch = unit_germs(names, per_day, 0.25, [42164.7, 0.0, 0.0, 3.0747612])
    orbit = {"position": ("x", "y"), "velocity": ("vx", "vy"), "scale": 86400.0}
    kick = (
        {"source": "radial", "axis": "radial", **orbit},
        {"source": "tangential", "axis": "transverse", **orbit},
    )
    steps = {"batch": True, "method": "rk8", "step": 0.025}
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "motion.py").write_text((SLOT_WATCH / "dynamics.py").read_text() + STILL)
        where = context(folder, states, (), names)
        inner = {"adapter": "ode", "rhs": "motion:still", **steps}
        kicked = build("kicks", folder, where, propagator=inner, kick=kick, legs=legs)
        forced = build("ode", folder, where, rhs="motion:rates", **steps)
        found, exact = (covariance_of(p.propagate(batch).states) for p in (kicked, forced))
    return apart(found, exact)
