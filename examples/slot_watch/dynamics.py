"""A satellite in a geostationary slot about 19 degrees east (an invented scenario).

Planar motion in inertial axes, of which x points to the satellite's mean place at t = 0, under the
central field, J2 and the tesseral J22. State x, y (km), vx, vy (km/s); time in days. The noise is a
radial and a tangential acceleration (km/s^2), as from a thruster that is never quite shut.

The Earth's constants are those of EGM96 and WGS 84 (National Imagery and Mapping Agency, TR8350.2,
2000), from memory: mu = 398600.4418 km^3/s^2, radius 6378.137 km, J2 = 1.08263e-3, J22 = 1.8154e-6
about 14.93 degrees west, one turn in a sidereal day.
"""

import numpy as np

MU = 398600.4418
RADIUS = 6378.137
J2 = 1.08263e-3
J22 = 1.8154e-6
AXIS22 = np.deg2rad(-14.93)
OMEGA = 7.292115e-5
DAY = 86400.0
START = np.deg2rad(19.07)  # longitude at t = 0


def rates(t, x, xi, parameters):
    """dx/dt per day of states x (n, 4) under accelerations xi (n, 2) at time t in days."""
    r2 = x[:, 0] ** 2 + x[:, 1] ** 2
    r = np.sqrt(r2)
    ux, uy = x[:, 0] / r, x[:, 1] / r
    # cosine and sine of twice the angle from the axis of the tesseral to the satellite
    turn = 2.0 * (START - AXIS22 - OMEGA * DAY * t)
    c2, s2 = ux * ux - uy * uy, 2.0 * ux * uy
    cosine = c2 * np.cos(turn) - s2 * np.sin(turn)
    sine = s2 * np.cos(turn) + c2 * np.sin(turn)
    gravity, ratio = MU / r2, (RADIUS / r) ** 2
    radial = xi[:, 0] - gravity * (1.0 + 1.5 * J2 * ratio + 9.0 * J22 * ratio * cosine)
    tangential = xi[:, 1] - gravity * 6.0 * J22 * ratio * sine
    dx = np.empty_like(x)
    dx[:, :2] = x[:, 2:]
    dx[:, 2] = ux * radial - uy * tangential
    dx[:, 3] = uy * radial + ux * tangential
    return dx * DAY
