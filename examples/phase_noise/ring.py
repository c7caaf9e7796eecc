"""One turn of a stationary bucket, with a cavity whose phase is not quiet (an invented ring).

Phase f (rad) from the synchronous one and energy deviation e, scaled so that small motions are
circles of the synchrotron tune Q:
    e <- e - 2 pi Q sin(f + noise of the turn),   f <- f + 2 pi Q e
"""

import numpy as np

TUNE = 0.025
ANGLE = 2.0 * np.pi * TUNE


def turn(k, x, w, parameters):
    """States x (n, 2) after turn k with the phase errors w (n, 1)."""
    energy = x[:, 1] - ANGLE * np.sin(x[:, 0] + w[:, 0])
    return np.stack([x[:, 0] + ANGLE * energy, energy], axis=1)


def out_of_bucket(x, parameters):
    """True where a particle has left its bucket."""
    return np.abs(x[:, 0]) > np.pi
