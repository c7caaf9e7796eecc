"""Numbers as a careful author prints them: no more digits than are known, never a false 0 or 1."""

from __future__ import annotations

import math
import re

import numpy as np

THIN = "\u202f"
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def power_of_ten(exponent: int) -> str:
    """10⁻³, as text that needs no typesetting."""
    return "10" + str(exponent).translate(_SUPERSCRIPT)


def pretty_unit(unit: str) -> str:
    """km^2/s^2 as km²/s²; powers that are no whole numbers stay as they are."""
    return re.sub(r"(?:\^|\*\*)(-?\d+)(?![\d.])", lambda m: m[1].translate(_SUPERSCRIPT), unit)


def typeset(sentence: str) -> str:
    """A sentence's 1.92e-04 as 1.92 × 10⁻⁴, km^2 as km², t^a as t^α."""
    text = re.sub(
        r"(?<![\w.])(-?\d+(?:\.\d+)?)e([+-]?\d+)(?![\w.])",
        lambda m: f"{m[1]}{THIN}×{THIN}{power_of_ten(int(m[2]))}",
        sentence,
    )
    text = re.sub(
        r"(?<=[^\W\d_]|\))\^(-?\d+)(?![\d.])", lambda m: m[1].translate(_SUPERSCRIPT), text
    )
    text = re.sub(r"(?<=\w)\^a\b", "^α", text)
    return re.sub(r"\ba = (?=[-\d])", "α = ", text) if "^α" in text else text


def squared(unit: str) -> str:
    """The square of a unit: km² of km, (km/s)² of km/s."""
    if not unit:
        return ""
    return f"{unit}²" if unit.isalpha() else f"({unit})²"


def _fixed(value: float, decimals: int) -> str:
    """Fixed notation with a true minus sign and thin spaces between thousands."""
    text = f"{value:,.{max(decimals, 0)}f}".replace(",", THIN)
    if text.startswith("-"):
        text = text[1:] if not text.strip("-0.") else "−" + text[1:]
    return text


def number(value: float, digits: int = 4) -> str:
    """A value with so many significant digits; powers of ten outside 1e-3 ... 1e6."""
    if value is None or math.isnan(value):
        return "–"
    if math.isinf(value):
        return "∞" if value > 0 else "−∞"
    if value == 0:
        return "0"
    magnitude = int(f"{abs(value):.{digits - 1}e}".split("e")[1])
    if -4 < magnitude < 6:
        text = _fixed(value, digits - 1 - magnitude)
        return text.rstrip("0").rstrip(".") if "." in text else text
    mantissa = _fixed(value / 10.0**magnitude, digits - 1)
    if "." in mantissa:
        mantissa = mantissa.rstrip("0").rstrip(".")
    return f"{mantissa}{THIN}×{THIN}{power_of_ten(magnitude)}"


def with_spread(mean: float, std: float) -> str:
    """mean ± std; std with two significant digits, mean rounded at the same decimal."""
    if not (np.isfinite(mean) and np.isfinite(std)):
        return f"{number(mean)} ± {number(std)}"
    if std == 0:
        return f"{number(mean, 6)} ± 0"
    exponent = math.floor(math.log10(abs(std)))
    top = max(math.floor(math.log10(abs(mean))) if mean else exponent, exponent)
    if exponent >= -6 and top < 6:
        decimals = max(1 - exponent, 0)
        return f"{_fixed(mean, decimals)} ± {_fixed(std, decimals)}"
    scale = 10.0**top
    decimals = max(1 - exponent + top, 0)
    if decimals > 9:
        return f"{number(mean, 6)} ± {number(std, 2)}"
    return f"({_fixed(mean / scale, decimals)} ± {_fixed(std / scale, decimals)})" + (
        f"{THIN}×{THIN}{power_of_ten(top)}"
    )


def beside(value: float, std: float) -> str:
    """A value of a quantity with that spread: as many decimals as two digits of std need."""
    if not (np.isfinite(value) and np.isfinite(std)) or std <= 0 or abs(value) >= 1e6:
        return number(value, 6)
    decimals = max(1 - math.floor(math.log10(std)), 0)
    return _fixed(value, decimals) if decimals <= 9 else number(value, 6)


def probability(value: float, digits: int = 3) -> str:
    """A probability; what is not exactly 0 or 1 is never printed as such."""
    if not np.isfinite(value):
        return "–"
    half = 0.5 * 10.0**-digits
    if 0 < value < half:
        return f"<{THIN}{half:.{digits + 1}f}"
    if 1 - half < value < 1:
        return f">{THIN}{1 - half:.{digits + 1}f}"
    return f"{value:.{digits}f}"


def interval(low: float, high: float, digits: int = 3) -> str:
    """Both ends of an interval of probabilities, rounded outwards."""
    scale = 10.0**digits
    ends = math.floor(low * scale + 1e-9) / scale, math.ceil(high * scale - 1e-9) / scale
    return " to ".join(f"{min(max(end, 0.0), 1.0):.{digits}f}" for end in ends)


def percent(share: float) -> str:
    """A share as a percentage."""
    if not np.isfinite(share):
        return "–"
    value = 100 * share
    if 0 < abs(value) < 0.5:
        return f"<{THIN}0.5{THIN}%"
    return f"{_fixed(value, 0)}{THIN}%"


def amount(value: float, unit: str, digits: int = 4) -> str:
    """A value and its unit."""
    return f"{number(value, digits)}{THIN}{unit}" if unit else number(value, digits)


def seconds(value: float) -> str:
    """A duration of wall clock in words of a person."""
    if not np.isfinite(value):
        return "–"
    if value < 120:
        return f"{value:.1f}{THIN}s"
    if value < 7200:
        return f"{value / 60:.1f}{THIN}min"
    return f"{value / 3600:.1f}{THIN}h"
