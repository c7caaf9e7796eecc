"""Exponents by the expansions' gradients against the variational equations themselves."""

from __future__ import annotations

import numpy as np
import pytest
from answer_problems import Stepper, solved

from nipc.problem.study import Study

START, STD, PUSH = np.array([0.0, -0.15, 0.5, 0.0]), np.array([0.003, 0.003, 0.0, 0.0]), 2e-3


def cubic(t, x, xi, p):
    """The Henon-Heiles Hamiltonian (1964), forced; energy 0.137: most starts are chaotic."""
    out = np.empty_like(x)
    out[:, :2] = x[:, 2:]
    out[:, 2] = -x[:, 0] - 2 * x[:, 0] * x[:, 1] + xi[:, 0]
    out[:, 3] = -x[:, 1] - x[:, 0] ** 2 + x[:, 1] ** 2 + xi[:, 1]
    return out


def bend(x):
    """Its Jacobian (n, 4, 4)."""
    j = np.zeros((x.shape[0], 4, 4))
    j[:, 0, 2] = j[:, 1, 3] = 1.0
    j[:, 2, 0], j[:, 2, 1] = -1 - 2 * x[:, 1], -2 * x[:, 0]
    j[:, 3, 0], j[:, 3, 1] = -2 * x[:, 0], -1 + 2 * x[:, 1]
    return j


def variational(n, times, begin, seed):
    """Members x (n, T, 4) and d x(t) / d x(begin) (n, T, 4, 4): Heun's scheme on both."""
    rng = np.random.default_rng(seed)
    x = START + STD * rng.standard_normal((n, 4))
    tangent = np.tile(np.eye(4), (n, 1, 1))
    xs, maps, h, t = [x], [tangent], 0.01, times[0]
    for end in times[1:]:
        while t < end - 1e-9:
            xi = PUSH * rng.standard_normal((n, 2)) / np.sqrt(h)
            k1 = cubic(t, x, xi, None)
            k2 = cubic(t, x + h * k1, xi, None)
            if t >= begin - 1e-9:
                j1 = bend(x) @ tangent
                j2 = bend(x + h * k1) @ (tangent + h * j1)
                tangent = tangent + h / 2 * (j1 + j2)
            x, t = x + h / 2 * (k1 + k2), t + h
        xs.append(x)
        maps.append(tangent)
    return np.stack(xs, axis=1), np.stack(maps, axis=1)


@pytest.mark.parametrize("arcs", [1, 10])
def test_a_cubic_potential(arcs):
    """Quantiles over members of ln sigma_max / t at the end, within 0.01 of 1,000 exact ones.

    One arc knows the start's directions x and y only; its exponent is within them.
    """
    end = 5.0 if arcs == 1 else 15.0
    names = ("x", "y", "vx", "vy")
    settings = Study(
        title="invented", seed=12, tolerance=0.05, propagator={"adapter": "ode"},
        clock={"end": end, "outputs": 31, "period": 2 * np.pi},
        state=[{"name": n, "mean": float(m), "std": float(s)}
               for n, m, s in zip(names, START, STD, strict=True)],
        noise=[{"name": f"f{k}", "intensity": PUSH, "terms": 5 if arcs == 1 else "auto"}
               for k in "xy"],
        quantity=[{"name": n} for n in names],
        chain={"arcs": arcs}, ensemble={"members": 4000},
    )  # fmt: skip
    data = solved(settings, Stepper(cubic, 0.1))
    begin, times = float(data["lyapunov_begin"]), data["time"].values
    assert begin == 0.0 if arcs == 1 else begin <= 1.5
    x, maps = variational(1000, times, begin, 5)
    if arcs == 1:
        scale = np.sqrt(np.mean(np.var(x, axis=0), axis=0))
        grown = maps[:, -1, :, :2] / scale[:, None]
        frame = np.eye(4)[:, :2] / scale[:, None]
        singular = np.linalg.svd(grown @ np.linalg.inv(np.linalg.qr(frame)[1]), compute_uv=False)[
            :, 0
        ]
    else:
        edges = np.linspace(0.0, end, arcs + 1)[1:]
        rows = np.searchsorted(times, edges - 1e-9)
        scale = np.sqrt(np.mean(np.var(x[:, rows], axis=0), axis=0))
        singular = np.linalg.svd(maps[:, -1] * scale / scale[:, None], compute_uv=False)[:, 0]
    exact = np.quantile(np.log(singular) / (end - begin), data["level"].values)
    np.testing.assert_allclose(data["lyapunov_exponent"].values[:, -1], exact, atol=0.01)
