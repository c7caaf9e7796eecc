"""Numbers are printed with the digits that are known: expected strings worked out by hand."""

from __future__ import annotations

import math

import pytest

from nipc.report.numbers import (
    beside,
    interval,
    number,
    percent,
    pretty_unit,
    probability,
    seconds,
    with_spread,
)

THIN = "\u202f"


@pytest.mark.parametrize(
    ("value", "digits", "text"),
    [
        (0.0, 4, "0"),
        (42164.8, 4, f"42{THIN}165"),
        (-0.125, 4, "−0.125"),
        (2.0, 4, "2"),
        (999.96, 4, f"1{THIN}000"),
        (1234567.0, 3, f"1.23{THIN}×{THIN}10⁶"),
        (-3.1e-8, 3, f"−3.1{THIN}×{THIN}10⁻⁸"),
        (math.inf, 4, "∞"),
        (-math.inf, 4, "−∞"),
        (math.nan, 4, "–"),
    ],
)
def test_number(value: float, digits: int, text: str) -> None:
    assert number(value, digits) == text


@pytest.mark.parametrize(
    ("mean", "std", "text"),
    [
        (75.0221, 0.0336, "75.022 ± 0.034"),
        (42165.68, 1.36, f"42{THIN}165.7 ± 1.4"),
        (-4.72679981, 6.31e-6, "−4.7267998 ± 0.0000063"),
        (1.5e9, 2.5e7, f"(1.500 ± 0.025){THIN}×{THIN}10⁹"),
        (0.125, 0.0, "0.125 ± 0"),
        (-0.001, 3.0, "0.0 ± 3.0"),
        (math.nan, math.nan, "– ± –"),
    ],
)
def test_mean_is_rounded_where_its_spread_is(mean: float, std: float, text: str) -> None:
    assert with_spread(mean, std) == text


def test_a_value_beside_a_spread_has_its_decimals() -> None:
    assert beside(74.96271, 0.0336) == "74.963"
    assert beside(0.125, 0.0) == "0.125"


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (1.0, "1.000"),
        (0.0, "0.000"),
        (0.99996, f">{THIN}0.9995"),
        (1e-9, f"<{THIN}0.0005"),
        (0.8017, "0.802"),
        (math.nan, "–"),
    ],
)
def test_a_probability_is_never_falsely_certain(value: float, text: str) -> None:
    assert probability(value) == text


def test_an_interval_is_rounded_outwards() -> None:
    assert interval(0.9936, 0.99991) == "0.993 to 1.000"
    assert interval(-1e-12, 0.0101) == "0.000 to 0.011"
    assert interval(0.25, 0.75) == "0.250 to 0.750"


def test_percent_and_seconds_and_units() -> None:
    assert percent(0.861) == f"86{THIN}%"
    assert percent(0.0004) == f"<{THIN}0.5{THIN}%"
    assert seconds(41.7) == f"41.7{THIN}s"
    assert seconds(5400) == f"90.0{THIN}min"
    assert pretty_unit("km^2/s^2") == "km²/s²"
    assert pretty_unit("m**-3") == "m⁻³"
    assert pretty_unit("km/s^1.5") == "km/s^1.5"
