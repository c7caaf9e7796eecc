"""Units of time that a clock and a noise intensity may differ in."""

from __future__ import annotations

from typing import Literal

TimeUnit = Literal["s", "min", "h", "day", "year"]

SECONDS: dict[str, float] = {
    "s": 1.0,
    "min": 60.0,
    "h": 3600.0,
    "day": 86400.0,
    "year": 365.25 * 86400.0,
}
