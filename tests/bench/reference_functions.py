"""Test functions whose variance shares are known in closed form, and orbits driven by noise."""

from __future__ import annotations

import numpy as np


def ishigami(x: np.ndarray) -> np.ndarray:
    """Ishigami & Homma (1990), a = 7, b = 0.1: x (n, 3) uniform on [−π, π] -> (n,)."""
    return np.sin(x[:, 0]) + 7.0 * np.sin(x[:, 1]) ** 2 + 0.1 * x[:, 2] ** 4 * np.sin(x[:, 0])


def ishigami_indices() -> tuple[np.ndarray, np.ndarray, float]:
    """First and total indices (3,) and the variance, by the integrals of the sine's powers."""
    a, b, pi = 7.0, 0.1, np.pi
    variance = a**2 / 8 + b * pi**4 / 5 + b**2 * pi**8 / 18 + 0.5
    first = np.array([0.5 * (1 + b * pi**4 / 5) ** 2, a**2 / 8, 0.0]) / variance
    joint = b**2 * pi**8 * (1 / 18 - 1 / 50) / variance
    return first, first + np.array([joint, 0.0, joint]), variance


G_WEIGHTS = np.array([0.0, 1.0, 4.5, 9.0, 99.0, 99.0, 99.0, 99.0])


def g_function(x: np.ndarray) -> np.ndarray:
    """Sobol's g-function (Saltelli & Sobol' 1995): x (n, 8) uniform on [0, 1] -> (n,)."""
    return np.prod((np.abs(4 * x - 2) + G_WEIGHTS) / (1 + G_WEIGHTS), axis=1)


def g_indices() -> tuple[np.ndarray, np.ndarray]:
    """First and total indices (8,): V_i = 1 / (3 (1 + a_i)²), V = Π (1 + V_i) − 1."""
    parts = 1 / (3 * (1 + G_WEIGHTS) ** 2)
    variance = np.prod(1 + parts) - 1
    return parts / variance, parts * np.prod(1 + parts) / (1 + parts) / variance


def hundred(z: np.ndarray) -> np.ndarray:
    """Sparse effect among 100 standard normal variables: seven terms."""
    return (
        1.0
        + 2.0 * z[:, 3]
        - 1.5 * z[:, 17]
        + 1.0 * z[:, 42]
        + 0.5 * z[:, 88]
        + 1.0 * z[:, 3] * z[:, 17]
        - 0.7 * z[:, 42] * z[:, 60]
        + 0.6 * (z[:, 91] ** 2 - 1.0) / np.sqrt(2.0)
    )


HUNDRED_TERMS = ((3,), (17,), (42,), (88,), (3, 17), (42, 60), (91, 91))
HUNDRED_VARIANCE = 2.0**2 + 1.5**2 + 1.0**2 + 0.5**2 + 1.0**2 + 0.7**2 + 0.6**2

REGULAR = (0.0, 0.1, 0.35, 0.0)  # x, y, p_x, p_y
CHAOTIC = (0.0, -0.15, 0.5, 0.0)


def cubic_orbit(
    z: np.ndarray,
    start: tuple[float, ...],
    horizon: float = 10.0,
    intensity: tuple[float, float] = (2e-3, 1e-3),
) -> np.ndarray:
    """State at the horizon of H = (p² + x² + y²)/2 + x² y − y³/3 (Hénon & Heiles 1964) with white
    forces on both momenta, z (n, 2 K) their Legendre coefficients; fourth-order Runge–Kutta."""
    n, n_modes = z.shape[0], z.shape[1] // 2
    scale = np.sqrt((2 * np.arange(n_modes) + 1) / horizon)
    modes = z.reshape(n, 2, n_modes) * scale * np.array(intensity)[:, None]

    def rate(t: float, s: np.ndarray) -> np.ndarray:
        x, y, px, py = s
        at = np.polynomial.legendre.legvander(np.array([2 * t / horizon - 1]), n_modes - 1)[0]
        fx, fy = (modes @ at).T
        return np.stack([px, py, -x - 2 * x * y + fx, -y - x * x + y * y + fy])

    s = np.repeat(np.array(start)[:, None], n, axis=1)
    steps = 400
    h = horizon / steps
    for k in range(steps):
        t = k * h
        k1 = rate(t, s)
        k2 = rate(t + h / 2, s + h / 2 * k1)
        k3 = rate(t + h / 2, s + h / 2 * k2)
        k4 = rate(t + h, s + h * k3)
        s = s + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
    return s.T
