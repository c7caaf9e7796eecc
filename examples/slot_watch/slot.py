"""Quantities of the slot watch that are more than an expression."""

import numpy as np

START = 0.07  # degrees east of the slot's centre at t = 0
EARTH_PER_DAY = 7.292115e-5 * 86400.0


def offset(t, states, parameters):
    """Longitude east of the slot's centre in degrees: t (T,), states (n, T, 4) -> (n, T)."""
    angle = np.arctan2(states[..., 1], states[..., 0]) - EARTH_PER_DAY * t
    return START + np.degrees((angle + np.pi) % (2.0 * np.pi) - np.pi)
