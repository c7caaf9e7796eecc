"""Two-body motion in closed form: a propagator that has no input for any force beside it.

Lagrange's f and g with the difference of eccentric anomalies (Battin 1999, An Introduction to the
Mathematics and Methods of Astrodynamics, section 4.3; from memory). The orbiter is invented; the
Moon's mu = 4902.800 km^3/s^2 is from memory.
"""

import numpy as np

MU = 4902.800


def propagate(x0, times, forcing, parameters):
    """States (n, T, 4) from x0 (n, 4) in km and km/s at times[0]; forcing has no sources."""
    r, v = x0[:, None, :2], x0[:, None, 2:]
    t = times - times[0]
    r0 = np.linalg.norm(r, axis=2)
    a = 1.0 / (2.0 / r0 - np.sum(v * v, axis=2) / MU)
    n, s = np.sqrt(MU / a**3), np.sum(r * v, axis=2) / np.sqrt(MU * a)
    c = 1.0 - r0 / a
    e = n * t
    for _ in range(8):  # Kepler's equation, by Newton's method
        excess = e - c * np.sin(e) + s * (1.0 - np.cos(e)) - n * t
        e = e - excess / (1.0 - c * np.cos(e) + s * np.sin(e))
    cosine, sine = np.cos(e), np.sin(e)
    distance = a * (1.0 - c * cosine + s * sine)
    f = 1.0 - a / r0 * (1.0 - cosine)
    g = t - (e - sine) / n
    df = -np.sqrt(MU * a) / (distance * r0) * sine
    dg = 1.0 - a / distance * (1.0 - cosine)
    position = f[..., None] * r + g[..., None] * v
    return np.concatenate([position, df[..., None] * r + dg[..., None] * v], axis=2)
