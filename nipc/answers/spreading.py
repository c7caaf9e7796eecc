"""How fast does the non-constant part of a quantity grow?"""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray


def spread_rate(variance: FloatArray, times: FloatArray, window: float | None = None) -> FloatArray:
    """1/2 d ln(variance) / dt, (T, ...) to (T, ...): the norm's growth rate, Lyapunov-like.

    `variance` is the sum of the squared non-constant coefficients, or the ensemble's variance. The
    slope is that of a local straight line with tricube weights over `window` (a tenth of the
    horizon, and at least five times), fitted again with bisquare weights so that one odd value does
    not tilt it (Cleveland 1979). NaN where there is no spread.
    """
    variance, times = np.asarray(variance, float), np.asarray(times, float)
    flat = variance.reshape(times.size, -1)
    with np.errstate(divide="ignore", invalid="ignore"):
        log = np.where(flat > 0.0, 0.5 * np.log(flat), np.nan)
    span = (times[-1] - times[0]) / 10.0 if window is None else window
    rate = np.full_like(log, np.nan)
    for k, t in enumerate(times):
        distance = np.abs(times - t)
        fifth = float(np.sort(distance)[min(4, times.size - 1)])
        reach = max(0.5 * span, fifth)
        near = np.flatnonzero(distance <= reach)
        if near.size >= 3:
            weights = (1.0 - (distance[near] / (1.001 * reach)) ** 3) ** 3
            rate[k] = _robust_slope(times[near] - t, log[near], weights)
    rate[np.isnan(log)] = np.nan
    return rate.reshape(variance.shape)


def _robust_slope(x: FloatArray, y: FloatArray, weights: FloatArray) -> FloatArray:
    """Slopes of columns y (m, c) over x (m,), missing values left out."""
    kept = np.isfinite(y)
    y = np.where(kept, y, 0.0)
    w = weights[:, None] * kept
    _, residual = _line(x, y, w)
    # residuals at rounding level are no outliers
    scale = np.median(np.where(kept, np.abs(residual), 0.0), axis=0)
    scale = np.maximum(scale, 1e-12 * np.maximum(1.0, np.abs(y).max(axis=0)))
    bisquare = np.clip(1.0 - (residual / (6.0 * scale)) ** 2, 0.0, None) ** 2
    return _line(x, y, w * bisquare)[0]


def _line(x: FloatArray, y: FloatArray, w: FloatArray) -> tuple[FloatArray, FloatArray]:
    with np.errstate(invalid="ignore", divide="ignore"):
        total = w.sum(axis=0)
        mean_x, mean_y = (w * x[:, None]).sum(axis=0) / total, (w * y).sum(axis=0) / total
        dx, dy = x[:, None] - mean_x, y - mean_y
        slope = (w * dx * dy).sum(axis=0) / (w * dx**2).sum(axis=0)
    enough = (w > 0.0).sum(axis=0) >= 3
    slope = np.where(enough, slope, np.nan)
    return slope, np.where(np.isfinite(slope), dy - slope * dx, 0.0)
