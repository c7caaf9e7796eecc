"""A satellite in a geostationary slot, in the Earth-fixed rotating plane (an invented scenario).

Planar motion under the central field, J2 and the J22 tesseral, in polar coordinates that turn with
the Earth. Constants of the Earth: EGM96 and WGS 84 values, from memory.

State: r (km), lon (rad, east longitude), vr (km/s), vt (km/s, inertial tangential velocity).
Noise: radial and tangential acceleration (km/s^2), as from a thruster that is never quite shut.
"""

import numpy as np

MU = 398600.4418  # km^3/s^2
RE = 6378.137  # km
J2 = 1.08262668e-3
J22 = 1.8155e-6
LON22 = np.deg2rad(-14.929)
OMEGA = 7.292115e-5  # rad/s
DAY = 86400.0


def rates(t, x, xi, parameters):
    """dx/dt per day of states x (n, 4) under accelerations xi (n, 2)."""
    r, lon, vr, vt = x[:, 0], x[:, 1], x[:, 2], x[:, 3]
    gravity = MU / r**2
    ratio = (RE / r) ** 2
    angle = 2.0 * (lon - LON22)
    radial = -gravity * (1.0 + 1.5 * J2 * ratio + 9.0 * J22 * ratio * np.cos(angle))
    tangential = -gravity * 6.0 * J22 * ratio * np.sin(angle)
    dx = np.empty_like(x)
    dx[:, 0] = vr
    dx[:, 1] = vt / r - OMEGA
    dx[:, 2] = vt**2 / r + radial
    dx[:, 3] = -vr * vt / r + tangential
    # the noise intensity is per square root of a second, the clock runs in days
    dx[:, 2] += xi[:, 0]
    dx[:, 3] += xi[:, 1]
    return dx * DAY
