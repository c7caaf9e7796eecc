"""Two-body motion: Kepler's equation and the equinoctial elements of a planar orbit.

Broucke & Cefola 1972 (mean longitude) and Walker, Ireland & Owens 1985 (true longitude). An orbit
here turns counter-clockwise in its plane; what is not such an orbit comes back as NaN.
"""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray

Components = tuple[FloatArray, ...]


def eccentric_anomaly(mean_anomaly: FloatArray, e: FloatArray) -> FloatArray:
    """E in [-pi, pi] with E - e sin E = M, for M in [-pi, pi] and 0 <= e < 1.

    On [0, pi] E - e sin E - M is convex, so that Newton's iteration from any point where it is
    positive falls monotonically on the root: the start is the least of four such points.
    """
    m = np.abs(mean_anomaly)
    small = np.maximum(e, 1e-300)
    starts = (m / (1.0 - e), np.cbrt(12.0 * m / small), np.full_like(m, np.pi))
    anomaly = m + e
    for start in starts:
        anomaly = np.minimum(anomaly, start)
    for _ in range(60):
        step = (anomaly - e * np.sin(anomaly) - m) / (1.0 - e * np.cos(anomaly))
        anomaly = anomaly - step
        if not np.any(np.abs(step) > 4e-16 * (1.0 + anomaly)):
            break
    return np.asarray(np.copysign(anomaly, mean_anomaly))


def eccentricity_vector(mu: float, plane: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """(e_x, e_y, L): the vector v x L / mu - r / |r| and the angular momentum L."""
    x, y, vx, vy = plane
    r, momentum = np.hypot(x, y), x * vy - y * vx
    return vy * momentum / mu - x / r, -vx * momentum / mu - y / r, momentum


def to_mean(mu: float, plane: FloatArray) -> Components:
    """(x, y, vx, vy) to (n, e_x, e_y, mean longitude): mean motion n = sqrt(mu / a^3)."""
    x, y, vx, vy = plane
    ex, ey, momentum = eccentricity_vector(mu, plane)
    inverse = 2.0 / np.hypot(x, y) - (vx**2 + vy**2) / mu
    root = np.where(momentum > 0.0, momentum * np.sqrt(inverse / mu), np.nan)  # sqrt(1 - e^2)
    beta = 1.0 / (1.0 + root)
    cx, cy, across = 1.0 - beta * ey**2, 1.0 - beta * ex**2, beta * ex * ey
    cosine = ex + (cy * x - across * y) * inverse / root
    sine = ey + (cx * y - across * x) * inverse / root
    longitude = np.arctan2(sine, cosine)
    return np.sqrt(mu * inverse**3), ex, ey, longitude - ex * sine + ey * cosine


def from_mean(
    mu: float, n: FloatArray, ex: FloatArray, ey: FloatArray, mean: FloatArray
) -> Components:
    """(n, e_x, e_y, mean longitude) to (x, y, vx, vy); NaN where n <= 0 or e >= 1."""
    a = np.cbrt(mu / np.where(n > 0.0, n, np.nan) ** 2)
    e = np.hypot(ex, ey)
    e = np.where(e < 1.0, e, np.nan)
    root = np.sqrt((1.0 - e) * (1.0 + e))
    perihelion = np.arctan2(ey, ex)
    anomaly = mean - perihelion
    anomaly = anomaly - 2.0 * np.pi * np.round(anomaly / (2.0 * np.pi))
    longitude = eccentric_anomaly(anomaly, e) + perihelion
    c, s = np.cos(longitude), np.sin(longitude)
    beta = 1.0 / (1.0 + root)
    cx, cy, across = 1.0 - beta * ey**2, 1.0 - beta * ex**2, beta * ex * ey
    ratio = 1.0 - ex * c - ey * s
    speed = n * a / ratio
    return (
        a * (cx * c + across * s - ex),
        a * (cy * s + across * c - ey),
        speed * (across * c - cx * s),
        speed * (cy * c - across * s),
    )


def to_true(mu: float, plane: FloatArray) -> Components:
    """(x, y, vx, vy) to (p, e_x, e_y, true longitude), for any conic."""
    ex, ey, momentum = eccentricity_vector(mu, plane)
    p = np.where(momentum > 0.0, momentum, np.nan) ** 2 / mu
    return p, ex, ey, np.arctan2(plane[1], plane[0])


def from_true(
    mu: float, p: FloatArray, ex: FloatArray, ey: FloatArray, true: FloatArray
) -> Components:
    """(p, e_x, e_y, true longitude) to (x, y, vx, vy); NaN where p <= 0 or beyond an asymptote."""
    c, s = np.cos(true), np.sin(true)
    p = np.where(p > 0.0, p, np.nan)
    ratio = 1.0 + ex * c + ey * s
    r = p / np.where(ratio > 0.0, ratio, np.nan)
    speed = np.sqrt(mu / p)
    return r * c, r * s, -speed * (s + ey), speed * (c + ex)


def unusable_orbit(mu: float, plane: FloatArray, closed: bool) -> str | None:
    """Why these orbits (4, n), seen in their planes, have no elements, or None."""
    x, y, vx, vy = plane
    r, v = np.hypot(x, y), np.hypot(vx, vy)
    if np.any(r <= 1e-9 * r.max(initial=0.0)):
        return f"the radius is {r.min():.3g} for a member"
    ex, ey, momentum = eccentricity_vector(mu, plane)
    if np.any(np.abs(momentum) <= 1e-6 * r * v):
        return "a member moves straight towards or away from the centre (no angular momentum)"
    e = np.hypot(ex, ey)
    if closed and np.any(2.0 / r <= v**2 / mu):
        return (
            f"a member is on an open orbit (eccentricity {e.max():.4g}), which has no mean"
            ' longitude; anomaly = "true" of the chart "equinoctial" holds open orbits'
        )
    return None
