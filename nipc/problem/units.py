"""Units of time that a clock and a noise intensity may differ in."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal

TimeUnit = Literal["s", "min", "h", "day", "year"]

SECONDS: dict[str, float] = {
    "s": 1.0,
    "min": 60.0,
    "h": 3600.0,
    "day": 86400.0,
    "year": 365.25 * 86400.0,
}


def time_of_velocity(units: Sequence[str]) -> str | None:
    """The unit of time in units such as 'km/s': 's'; None where none is found."""
    for unit in units:
        _, slash, below = unit.rpartition("/")
        if slash and below.strip() in SECONDS:
            return below.strip()
    return None


def chart_time_scale(clock_unit: str, state_units: Sequence[str]) -> float:
    """Velocity's units of time in one of the clock's: 86400 for km/s beside a clock in days.

    Charts work in the state's own units, so that mu is in km^3/s^2 where velocities are in km/s.
    """
    own = time_of_velocity(state_units)
    if own is None or clock_unit not in SECONDS:
        return 1.0
    return SECONDS[clock_unit] / SECONDS[own]
