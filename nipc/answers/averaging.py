"""Slow quantities: what is left when a fast oscillation is averaged out."""

from __future__ import annotations

import numpy as np

from nipc.arrays import FloatArray
from nipc.errors import InputError


def moving_average(
    values: FloatArray, times: FloatArray, period: float
) -> tuple[FloatArray, FloatArray]:
    """(1/P) int q over [t - P/2, t + P/2]: members (n, T, Q) to (n, T', Q) at times (T',).

    Trapezoid integrals at the given, not necessarily even, times; only times whose whole window is
    inside the range are kept. Raises InputError when the horizon is shorter than the period, or
    when the outputs are too wide apart to see it.
    """
    span = times[-1] - times[0]
    if not 0.0 < period < span:
        raise InputError(
            f"a period of {period:g} cannot be averaged out over a horizon of {span:g}"
        )
    if np.diff(times).max() > period / 4.0:
        raise InputError(
            f"averaging over a period of {period:g} needs output times at most"
            f" {period / 4:g} apart, not {np.diff(times).max():g}"
        )
    steps = np.diff(times)[:, None]
    area = np.zeros_like(values)
    np.cumsum(0.5 * (values[:, 1:] + values[:, :-1]) * steps, axis=1, out=area[:, 1:])
    slack = 1e-9 * span
    kept = (times - 0.5 * period >= times[0] - slack) & (times + 0.5 * period <= times[-1] + slack)
    middle = times[kept]
    upper = _integral_at(values, area, times, middle + 0.5 * period)
    lower = _integral_at(values, area, times, middle - 0.5 * period)
    return (upper - lower) / period, middle


def _integral_at(
    values: FloatArray, area: FloatArray, times: FloatArray, at: FloatArray
) -> FloatArray:
    """The running integral of the broken line through `values`, at any times."""
    place = np.clip(np.searchsorted(times, at, side="right") - 1, 0, times.size - 2)
    step = (at - times[place])[:, None]
    width = (times[place + 1] - times[place])[:, None]
    start, rise = values[:, place], values[:, place + 1] - values[:, place]
    return np.asarray(area[:, place] + step * (start + 0.5 * step / width * rise))


def detect_period(values: FloatArray, times: FloatArray, share: float = 0.5) -> float | None:
    """The period of one member's or the mean's strongest oscillation (T,), or None.

    Evenly resampled, a straight line taken out, tapered; a peak of the spectrum counts when it and
    its neighbours hold more than `share` of the variance, at three turns or more over the horizon.
    """
    if times.size < 16 or not np.isfinite(values).all():
        return None
    even = np.linspace(times[0], times[-1], times.size)
    series = np.interp(even, times, values)
    series = series - np.polyval(np.polyfit(even - even[0], series, 1), even - even[0])
    if np.ptp(series) <= 1e-9 * np.abs(values).max():
        return None
    taper = np.hanning(series.size)
    padded = 8 * series.size
    power = np.abs(np.fft.rfft(series * taper, padded)) ** 2
    frequency = np.fft.rfftfreq(padded, even[1] - even[0])
    peak = int(np.argmax(power))
    # the taper's main lobe is four bins of the unpadded spectrum wide
    lobe = slice(max(peak - 16, 0), peak + 17)
    turns = frequency[peak] * (even[-1] - even[0])
    if turns < 3.0 or power[lobe].sum() < share * power.sum():
        return None
    left, top, right = power[peak - 1], power[peak], power[min(peak + 1, power.size - 1)]
    bend = left - 2.0 * top + right
    offset = 0.0 if bend == 0.0 else 0.5 * (left - right) / bend
    return float(1.0 / ((peak + offset) * (frequency[1] - frequency[0])))
