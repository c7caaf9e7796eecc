"""Numbers in sentences: as many digits as their interval allows, units behind."""

from __future__ import annotations

import math


def number(value: float, digits: int = 4) -> str:
    """To so many significant digits; plain from 1e-3 to 1e6."""
    if math.isnan(value):
        return "unknown"
    if math.isinf(value):
        return "infinity" if value > 0 else "minus infinity"
    if value == 0.0:
        return "0"
    return f"{value:.{digits}g}" if 1e-3 <= abs(value) < 1e6 else f"{value:.{digits - 1}e}"


def estimate(value: float, low: float, high: float, unit: str = "") -> str:
    """`value unit (low to high)` to the first digits of the half-width; ends only if known."""
    tail = f" {unit}" if unit and unit != "1" else ""
    if not (math.isfinite(low) and math.isfinite(high) and high > low):
        return f"{number(value)}{tail}"
    size = max(abs(value), abs(low), abs(high))
    if not 1e-3 <= size < 1e6:
        return f"{number(value, 3)}{tail} ({number(low, 3)} to {number(high, 3)})"
    half = 0.5 * (high - low)
    places = -math.floor(math.log10(half))
    places += int(half * 10.0**places < 1.95)  # a leading 1 is too coarse a step
    shown = [_rounded(v, places) for v in (value, low, high)]
    return f"{shown[0]}{tail} ({shown[1]} to {shown[2]})"


def percent(value: float, low: float, high: float) -> str:
    """A share as `12 % (10 to 14)`."""
    return estimate(100.0 * value, 100.0 * low, 100.0 * high, "%")


def _rounded(value: float, places: int) -> str:
    places = min(places, 6)
    return f"{round(value, places):.{max(places, 0)}f}"
