"""The problems of the economy benchmark: a study, a propagator, and an independent reference.

References integrate the stochastic equations with plain Gaussian increments, none of which touches
nipc: Runge-Kutta with the noise held over each step (weak order 2 for additive noise), or Heun's
scheme (Stratonovich) for multiplicative noise. All scenarios are invented.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from nipc.problem.study import Study
from nipc.runs.propagator import Batch, Propagator, Trajectories

MU, RADIUS, J2, J22 = 398600.4418, 6378.137, 1.08263e-3, 1.8154e-6
OMEGA, DAY = 7.292115e-5, 86400.0
AXIS22, SLOT = np.deg2rad(-14.93), np.deg2rad(19.0)


class RungeKutta(Propagator):
    """Classical Runge-Kutta on a smooth forcing path, rows independent of each other."""

    vectorised = True

    def __init__(self, rates: Callable[..., np.ndarray], step: float) -> None:
        self.rates, self.step = rates, step

    def fingerprint(self) -> str:
        return f"{self.rates.__name__} {self.step}"

    def propagate(self, batch: Batch) -> Trajectories:
        x = batch.states.copy()
        out = np.empty((len(batch), batch.times.size, x.shape[1]))
        out[:, 0] = x
        for i, (a, b) in enumerate(zip(batch.times[:-1], batch.times[1:], strict=True)):
            steps = max(1, int(np.ceil((b - a) / self.step - 1e-9)))
            t = np.linspace(a, b, 2 * steps + 1)
            xi = batch.forcing.table(t)
            h = t[2] - t[0]
            for k in range(0, 2 * steps, 2):
                p = batch.parameters
                k1 = self.rates(t[k], x, xi[:, k], p)
                k2 = self.rates(t[k + 1], x + h / 2 * k1, xi[:, k + 1], p)
                k3 = self.rates(t[k + 1], x + h / 2 * k2, xi[:, k + 1], p)
                k4 = self.rates(t[k + 2], x + h * k3, xi[:, k + 2], p)
                x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
            out[:, i + 1] = x
        return Trajectories.complete(out)


@dataclass(frozen=True)
class Problem:
    """reference(n, times, rng) -> quantities (n, T, Q) by the independent integrator."""

    name: str
    study: Study
    propagator: Propagator
    reference: Callable[[int, np.ndarray, np.random.Generator], np.ndarray]
    box: tuple[int, float, float] | None
    goal_cost: float | None
    goal_ratio: float
    path_goal: float | None


def earth(t: float, x: np.ndarray, xi: np.ndarray, p: np.ndarray) -> np.ndarray:
    """Inertial axes, J2 and J22, planar (4 states) or spatial (6), per day."""
    d = x.shape[1] // 2
    z = x[:, 2] if d == 3 else 0.0
    rho2 = x[:, 0] ** 2 + x[:, 1] ** 2
    r = np.sqrt(rho2 + z**2)
    ux, uy, uz = x[:, 0] / r, x[:, 1] / r, z / r
    turn = 2.0 * (SLOT - AXIS22 - OMEGA * DAY * t)
    ratio = (RADIUS / r) ** 2
    g = MU / r**2
    # J22 potential: 3 MU RE^2 J22 (X^2 - Y^2) / r^5 in axes of the tesseral
    c, s = np.cos(turn), np.sin(turn)
    q = (ux**2 - uy**2) * c - 2.0 * ux * uy * s
    qx, qy = 2.0 * (ux * c - uy * s), -2.0 * (uy * c + ux * s)
    f22, f2 = 3.0 * g * ratio * J22, 1.5 * g * ratio * J2
    out = np.empty_like(x)
    out[:, :d] = x[:, d:]
    rho = np.sqrt(rho2) / r
    cx, cy = ux / rho, uy / rho
    out[:, d] = -g * ux - f2 * ux * (1 - 5 * uz**2) + f22 * (qx - 5 * q * ux)
    out[:, d + 1] = -g * uy - f2 * uy * (1 - 5 * uz**2) + f22 * (qy - 5 * q * uy)
    out[:, d] += cx * xi[:, 0] - cy * xi[:, 1]
    out[:, d + 1] += cy * xi[:, 0] + cx * xi[:, 1]
    if d == 3:
        out[:, 5] = -g * uz - f2 * uz * (3 - 5 * uz**2) - 5 * f22 * q * uz + xi[:, 2]
    return out * DAY


def geostationary(dimensions: int, days: float = 28.0, arcs: int = 56) -> Problem:
    """Start +-1 km and +-1e-4 km/s, white accelerations of 2e-8 km/s^1.5."""
    w, radius = OMEGA * DAY, 42164.697159
    axes = "xyz"[:dimensions]
    state = [{"name": n, "unit": "km", "std": 1.0} for n in axes]
    state += [{"name": f"v{n}", "unit": "km/s", "std": 1e-4} for n in axes]
    state[0]["mean"], state[dimensions + 1]["mean"] = radius, radius * OMEGA
    noise = [
        {"name": n, "intensity": 2e-8, "per": "s"}
        for n in ("radial", "tangential", "normal")[:dimensions]
    ]
    speed = "+".join(f"v{n}**2" for n in axes)
    size = "+".join(f"{n}**2" for n in axes)
    longitude = f"180/pi*arctan2(y*cos({w}*t)-x*sin({w}*t),x*cos({w}*t)+y*sin({w}*t))"
    quantities = [
        {"name": "radius", "expression": f"sqrt({size})"},
        {"name": "longitude", "expression": longitude, "box": [-1.0, 2.0]},
        {"name": "energy", "expression": f"0.5*({speed}) - {MU}/sqrt({size})"},
    ]
    if dimensions == 3:
        quantities.append({"name": "height", "expression": "z"})
    study = Study(
        title="geostationary slot (invented)", seed=11, tolerance=0.02,
        propagator={"adapter": "ode"},
        clock={"end": days, "unit": "day", "outputs": arcs + 1, "period": 1.0},
        state=state, noise=noise, quantity=quantities,
        chart={"name": "equinoctial", "mu": MU, "rotation_rate": OMEGA},
        chain={"arcs": arcs}, ensemble={"members": 200_000},
    )  # fmt: skip

    def reference(n: int, times: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """In polar or cylindrical coordinates that turn with the Earth."""
        return _rotating_reference(dimensions, radius, n, times, rng)

    name = f"geostationary, {2 * dimensions} states, {days:g} days"
    goals = (40.0, 200.0) if dimensions == 2 else (80.0, 100.0)
    return Problem(name, study, RungeKutta(earth, 0.01), reference, (1, -1.0, 2.0), *goals, 0.02)


def _rotating_reference(
    dimensions: int, radius: float, n: int, times: np.ndarray, rng: np.random.Generator
) -> np.ndarray:
    def rates(s: np.ndarray) -> np.ndarray:
        rho, lon, vr, vt = s[0], s[1], s[2], s[3]
        z = s[4] if dimensions == 3 else 0.0
        r2 = rho**2 + z**2
        r = np.sqrt(r2)
        g, ratio, sine2 = MU / r2, RADIUS**2 / r2, z**2 / r2
        angle = 2.0 * (lon + SLOT - AXIS22)
        f2, f22 = 1.5 * g * ratio * J2, 3.0 * g * ratio * J22
        q = (rho**2 / r2) * np.cos(angle)
        radial = -(g + f2 * (1 - 5 * sine2)) * rho / r + f22 * (2 * np.cos(angle) - 5 * q) * rho / r
        tangential = -2.0 * f22 * np.sin(angle) * rho / r
        parts = [vr, vt / rho - OMEGA, vt**2 / rho + radial, -vr * vt / rho + tangential]
        if dimensions == 3:
            parts += [s[5], -(g + f2 * (3 - 5 * sine2) + 5 * f22 * q) * z / r]
        return DAY * np.array(parts)

    x, y = radius + rng.standard_normal(n), rng.standard_normal(n)
    vx = 1e-4 * rng.standard_normal(n)
    vy = radius * OMEGA + 1e-4 * rng.standard_normal(n)
    rho = np.hypot(x, y)
    s = [rho, np.arctan2(y, x), (x * vx + y * vy) / rho, (x * vy - y * vx) / rho]
    if dimensions == 3:
        s += [rng.standard_normal(n), 1e-4 * rng.standard_normal(n)]
    s = np.array(s)
    rows = [2, 3, 5][:dimensions]
    out = np.empty((n, times.size, 4 if dimensions == 3 else 3))
    for i, t in enumerate(times):
        if i:
            steps = int(np.ceil((t - times[i - 1]) / 0.025 - 1e-9))
            h = (t - times[i - 1]) / steps
            for _ in range(steps):
                kick = np.zeros_like(s)
                kick[rows] = 2e-8 * rng.standard_normal((dimensions, n)) * np.sqrt(DAY / h)
                k1 = rates(s) + kick
                k2 = rates(s + h / 2 * k1) + kick
                k3 = rates(s + h / 2 * k2) + kick
                k4 = rates(s + h * k3) + kick
                s = s + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        z, vz = (s[4], s[5]) if dimensions == 3 else (0.0, 0.0)
        r = np.sqrt(s[0] ** 2 + z**2)
        out[:, i, 0], out[:, i, 1] = r, np.rad2deg(s[1])
        out[:, i, 2] = 0.5 * (s[2] ** 2 + s[3] ** 2 + vz**2) - MU / r
        if dimensions == 3:
            out[:, i, 3] = z
    return out


def cubic(t: float, x: np.ndarray, xi: np.ndarray, p: np.ndarray) -> np.ndarray:
    """The Henon-Heiles Hamiltonian (1964), forced."""
    out = np.empty_like(x)
    out[:, :2] = x[:, 2:]
    out[:, 2] = -x[:, 0] - 2.0 * x[:, 0] * x[:, 1] + xi[:, 0]
    out[:, 3] = -x[:, 1] - x[:, 0] ** 2 + x[:, 1] ** 2 + xi[:, 1]
    return out


def henon_heiles(name: str, start: tuple[float, ...], ratio: float, path: float | None) -> Problem:
    """T = 50, positions +-0.003, white forces 2e-3 and 1e-3."""
    names, stds = ("x", "y", "vx", "vy"), (0.003, 0.003, 0.0, 0.0)
    study = Study(
        title="cubic potential (invented)", seed=12, tolerance=0.03,
        propagator={"adapter": "ode"},
        clock={"end": 50.0, "outputs": 33, "period": 2.0 * np.pi},
        state=[
            {"name": n, "mean": m, "std": s} for n, m, s in zip(names, start, stds, strict=True)
        ],
        noise=[{"name": "f_x", "intensity": 2e-3}, {"name": "f_y", "intensity": 1e-3}],
        quantity=[{"name": n} for n in names],
        chain={"arcs": 32, "largest_degree": 6, "direct_share": 1.0},
        ensemble={"members": 300_000},
    )  # fmt: skip

    def reference(n: int, times: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        x = np.array(start) + rng.standard_normal((n, 4)) * np.array(stds)
        return held_noise(cubic, x, times, 0.05, np.array([2e-3, 1e-3]), rng)

    return Problem(name, study, RungeKutta(cubic, 0.05), reference, None, None, ratio, path)


def held_noise(
    rates: Callable[..., np.ndarray],
    x: np.ndarray,
    times: np.ndarray,
    step: float,
    intensity: np.ndarray,
    rng: np.random.Generator,
) -> np.ndarray:
    """Runge-Kutta with the noise held constant over each step: additive noise."""
    out = np.empty((x.shape[0], times.size, x.shape[1]))
    out[:, 0] = x
    none = np.empty((x.shape[0], 0))
    for i in range(1, times.size):
        steps = int(np.ceil((times[i] - times[i - 1]) / step))
        h = (times[i] - times[i - 1]) / steps
        for _ in range(steps):
            xi = intensity * rng.standard_normal((x.shape[0], intensity.size)) / np.sqrt(h)
            k1 = rates(0.0, x, xi, none)
            k2 = rates(0.0, x + h / 2 * k1, xi, none)
            k3 = rates(0.0, x + h / 2 * k2, xi, none)
            k4 = rates(0.0, x + h * k3, xi, none)
            x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        out[:, i] = x
    return out


def dragged(t: float, x: np.ndarray, xi: np.ndarray, p: np.ndarray) -> np.ndarray:
    """Planar Kepler motion with mu = 1 and a drag -(c + xi) |v| v: multiplicative noise."""
    r3 = (x[:, 0] ** 2 + x[:, 1] ** 2) ** 1.5
    speed = np.hypot(x[:, 2], x[:, 3])
    drag = (1e-5 + xi[:, 0]) * speed
    out = np.empty_like(x)
    out[:, :2] = x[:, 2:]
    out[:, 2] = -x[:, 0] / r3 - drag * x[:, 2]
    out[:, 3] = -x[:, 1] / r3 - drag * x[:, 3]
    return out


def kepler_drag(revolutions: int = 30) -> Problem:
    """Stratonovich noise of 2e-5 in the drag, start +-1e-4, eccentricity 0.1."""
    end, start = 2.0 * np.pi * revolutions, np.array([0.9, 0.0, 0.0, np.sqrt(1.1 / 0.9)])
    names = ("x", "y", "vx", "vy")
    # from where a motion of unit rate would be: at all output times far from its cut
    angle = "arctan2(y*cos(t) - x*sin(t), x*cos(t) + y*sin(t))"
    study = Study(
        title="orbit with a fluctuating drag (invented)", seed=13, tolerance=0.02,
        propagator={"adapter": "ode"},
        clock={"end": end, "outputs": 2 * revolutions + 1, "period": 2.0 * np.pi},
        state=[{"name": n, "mean": float(m), "std": 1e-4}
               for n, m in zip(names, start, strict=True)],
        noise=[{"name": "drag", "intensity": 2e-5, "enters": "multiplicative"}],
        quantity=[
            {"name": "radius", "expression": "sqrt(x**2+y**2)"},
            {"name": "energy", "expression": "0.5*(vx**2+vy**2)-1/sqrt(x**2+y**2)"},
            {"name": "angle", "expression": angle},
        ],
        chart={"name": "equinoctial", "mu": 1.0},
        chain={"arcs": 2 * revolutions}, ensemble={"members": 200_000},
    )  # fmt: skip

    def reference(n: int, times: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        x = start + 1e-4 * rng.standard_normal((n, 4))
        paths = held_noise(dragged, x, times, 2.0 * np.pi / 100, np.array([2e-5]), rng)
        r = np.hypot(paths[..., 0], paths[..., 1])
        energy = 0.5 * (paths[..., 2] ** 2 + paths[..., 3] ** 2) - 1.0 / r
        turned = (paths[..., 0] + 1j * paths[..., 1]) * np.exp(-1j * times)
        return np.stack([r, energy, np.angle(turned)], axis=2)

    return Problem(
        f"orbit with multiplicative drag, {revolutions} revolutions",
        study, RungeKutta(dragged, 2.0 * np.pi / 80), reference, None, None, 80.0, None,
    )  # fmt: skip
