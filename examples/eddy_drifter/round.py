"""The drifter's chart: it goes round, which distance and angle say in nearly straight lines."""

import numpy as np


def from_state(states, t):
    """East and north (n, 2) to distance (km) and angle (rad)."""
    return np.stack([np.hypot(states[:, 0], states[:, 1]), np.arctan2(states[:, 1], states[:, 0])],
                    axis=1)  # fmt: skip


def to_state(values, t):
    """Distance and angle (n, 2) to east and north."""
    return values[:, :1] * np.stack([np.cos(values[:, 1]), np.sin(values[:, 1])], axis=1)
