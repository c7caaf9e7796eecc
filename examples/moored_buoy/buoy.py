"""A buoy on a line that stiffens as it is drawn (an invented scenario).

Offset s (m) down the wind and its speed v (m/s), per mass of the buoy:
    (1 + a) v' = -k s - k3 s^3 - c v + gust
with the added mass a of the water around it. Time in seconds.
"""

import numpy as np

STIFFNESS = 0.01  # 1/s^2
HARDENING = 1.0e-4  # 1/(m^2 s^2)
DAMPING = 0.03  # 1/s


def rates(t, x, xi, parameters):
    """dx/dt of states x (n, 2) under gusts xi (n, 1), added mass in parameters (n, 1)."""
    s, v = x[:, 0], x[:, 1]
    force = xi[:, 0] - STIFFNESS * s - HARDENING * s**3 - DAMPING * v
    return np.stack([v, force / (1.0 + parameters[:, 0])], axis=1)
