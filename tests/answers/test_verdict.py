"""Findings: true to the numbers, never without the trust horizon."""

from __future__ import annotations

import re

import numpy as np
import pytest
import xarray as xr

from nipc.answers.verdict import findings
from nipc.answers.wording import estimate, number, percent

TIMES = np.linspace(0.0, 28.0, 57)


def dataset(survival=0.96, trust=28.0, trust_spread=np.nan, allowance=0.62, **attrs):
    """An invented result: one boxed quantity, one without a box, a noise source and the start."""
    grow = TIMES / 28.0

    def both(first, second):
        return (("quantity", "time"), np.stack([first, second]))

    none, none2 = np.full(TIMES.size, np.nan), [np.nan, np.nan]
    left = 1.0 - (1.0 - survival) * grow
    variables = {
        "std": both(0.01 * grow, 0.4 * grow**2),
        "std_low": both(0.0097 * grow, 0.38 * grow**2),
        "std_high": both(0.0103 * grow, 0.42 * grow**2),
        "box_low": ("quantity", [-0.05, np.nan]),
        "box_high": ("quantity", [0.05, np.nan]),
        "survival_probability": both(left, none),
        "survival_probability_low": both(left - 0.004, none),
        "survival_probability_high": both(np.minimum(left + 0.004, 1.0), none),
        "inside_probability": both(left + 0.5 * (1 - left), none),
        "exit_time_quantile": (
            ("level", "quantity"),
            [[20.0, np.nan], [27.0 if survival < 0.5 else np.inf, np.nan]],
        ),
        "exit_time_quantile_low": (("level", "quantity"), [[19.5, np.nan], [26.0, np.nan]]),
        "exit_time_quantile_high": (("level", "quantity"), [[20.5, np.nan], [np.inf, np.nan]]),
        "spreading_verdict": ("quantity", ["diffusive", "super-diffusive"]),
        "diffusion_exponent": ("quantity", [1.0, 3.01]),
        "diffusion_exponent_low": ("quantity", [0.97, 2.95]),
        "diffusion_exponent_high": ("quantity", [1.03, 3.05]),
        "diffusion_coefficient": ("quantity", [2e-6, 1e-3]),
        "diffusion_coefficient_low": ("quantity", [1.9e-6, 9e-4]),
        "diffusion_coefficient_high": ("quantity", [2.1e-6, 1.1e-3]),
        "driver_total": (
            ("source", "quantity", "time"),
            np.repeat(np.array([[0.8, 0.3], [0.25, 0.72]])[:, :, None], TIMES.size, axis=2),
        ),
        "trust_horizon": ("quantity", [trust, 12.0]),
        "trust_horizon_distribution": ("quantity", [trust_spread, 20.0]),
        "allowance_limit": (("source", "quantity"), [[8.0, np.nan], [8.0, np.nan]]),
        **{
            f"allowance_scale{end}": (("source", "quantity"), [[factor * allowance, np.nan], none2])
            for end, factor in (("", 1.0), ("_low", 0.97), ("_high", 1.03))
        },
        "nonlinear_share": both(0.01 * grow, 0.3 * grow),
    }
    made = xr.Dataset(
        variables,
        coords={
            "time": ("time", TIMES, {"units": "d"}),
            "quantity": ["longitude", "radius"],
            "quantity_unit": ("quantity", ["deg", "km"]),
            "source": ["thrust", "start"],
            "source_kind": ("source", ["noise", "start"]),
            "level": [0.025, 0.5],
        },
        attrs={"propagator_runs": 1400, "failed_runs": 3, "monitoring_interval": 0.5, **attrs},
    )
    made["allowance_scale"].attrs.update(target=0.99, event="inside")
    return made


def said(made, *words):
    """The one finding that holds all of these words."""
    found = [s for s in findings(made) if all(w in s for w in words)]
    assert len(found) == 1, (words, findings(made))
    return found[0]


def test_every_number_about_the_motion_carries_the_trust_horizon():
    for made in (dataset(), dataset(trust=10.0), dataset(trust=np.nan), dataset(trust=0.0)):
        about = [s for s in findings(made) if "longitude" in s or "radius" in s]
        assert len(about) >= (5 if made["trust_horizon"][0] == 0.0 else 9)
        assert all("trust horizon" in s for s in about)


def test_the_four_answers():
    made = dataset()
    sentence = said(made, "longitude may leave its box (-0.05 to 0.05 deg)")
    assert "up to 28 d is 0.960 (0.956 to 0.964)" in sentence
    assert "2.5 % have left by 20.0 d (19.5 to 20.5)" in sentence
    assert "50 %" not in sentence
    assert "[trust horizon 28 d, the whole study]" in sentence
    assert "0.0100 deg (0.0097 to 0.0103) at 28 d" in said(made, "standard deviation of longitude")
    sentence = said(made, "spreading of longitude is diffusive")
    assert "a = 1.00 (0.97 to 1.03)" in sentence
    assert "2.00e-06 deg^2/d" in sentence
    sentence = said(made, "spreads longitude most is the noise source 'thrust', with 80 %")
    assert "next is the uncertain start, with 25 %" in sentence
    sentence = said(made, "To keep P(inside) of longitude at 0.99 or above")
    assert "'thrust' must be brought down to 0.620 (0.601 to 0.639) times" in sentence
    assert "not confirmed" not in sentence
    assert "1400 runs of the propagator; 3 of them failed" in said(made, "1400")
    said(made, "every 0.5 d")


@pytest.mark.parametrize(
    ("survival", "verb"), [(0.999, "stays in"), (0.96, "may leave"), (0.05, "leaves")]
)
def test_stays_or_leaves(survival, verb):
    assert said(dataset(survival), f"longitude {verb} its box")
    if survival < 0.5:
        sentence = said(dataset(survival), "longitude leaves")
        assert "50 % have left by 27 d" in sentence
        assert "(26" not in sentence  # its interval's end is beyond the horizon


def test_nothing_beyond_the_trust_horizon():
    made = dataset(trust=10.2)
    sentence = said(made, "longitude may leave")
    assert "up to 10 d is" in sentence  # the last output time that is trusted
    assert f"{1 - 0.04 * 10 / 28:.3f}" in sentence
    assert "have left" not in sentence  # that is at 20 d
    assert "[trust horizon 10.2 d of 28 d]" in sentence
    assert "not confirmed" in said(made, "To keep P(inside)")
    # a distribution trusted for longer than single paths
    assert "at 20 d. [trust horizon 20 d of 28 d; for single paths 12 d]" in said(
        made, "standard deviation of radius"
    )
    sentence = said(dataset(trust=10.0, trust_spread=28.0), "longitude may leave")
    assert "the whole study; for single paths 10 d" in sentence


def test_not_checked_and_never_trusted():
    assert "not checked against direct runs" in said(dataset(trust=np.nan), "longitude may leave")
    only = [s for s in findings(dataset(trust=0.0)) if "longitude" in s]
    assert len(only) == 1
    assert "Nothing can be said of longitude" in only[0]


def test_allowances():
    assert "may be raised to 1.20" in said(dataset(allowance=1.2), "To keep")
    assert "Even the noise source 'thrust' 8 times as strong keeps" in said(
        dataset(allowance=np.inf), "nothing was tried"
    )
    assert said(dataset(allowance=np.nan), "No reduction of any single source keeps P(inside)")
    made = dataset()
    made["driver_total"][{"source": 0}] = 0.1
    assert "(the uncertain start, the strongest driver, cannot do it alone)" in said(
        made, "To keep"
    )
    made["allowance_scale"].attrs["event"] = "survival"
    assert said(made, "To keep P(inside all the time) of longitude at 0.99")
    # nothing was asked, nothing is said
    unasked = dataset().drop_vars(["allowance_scale", "allowance_limit"])
    assert not [s for s in findings(unasked) if "P(inside)" in s or "reduction" in s]
    # no box, no allowance to speak of
    assert not [s for s in findings(dataset()) if "radius" in s and "P(inside)" in s]


def leaving(totals, half=0.05, survival=0.9, members=20_000):
    """Total shares of who leaves longitude's box, of the noise and the start."""
    made = dataset(survival, members=members)
    for end, shift in (("", 0.0), ("_low", -half), ("_high", half)):
        values = [[totals[0] + shift, np.nan], [totals[1] + shift, np.nan]]
        made[f"exit_driver_total{end}"] = (("source", "quantity"), values)
    return made


def test_who_decides_the_leaving_is_said_only_where_it_can_be_told():
    sentence = "whether it leaves by the end is decided most by the uncertain start"
    assert said(leaving((0.3, 0.8)), sentence)
    for made in (
        leaving((0.5, 0.58)),  # 0.53 to 0.63 and 0.45 to 0.55 overlap
        leaving((0.3, 0.8), survival=0.9999),  # two of 20,000 leave
        leaving((0.3, 0.8), survival=0.001),  # 20 of 20,000 stay
        leaving((0.8, 0.3)),  # the same source spreads it most: nothing to add
    ):
        assert not [s for s in findings(made) if "decided most" in s]


def test_no_spread_is_said():
    made = dataset()
    made["std"][:] = 0.0
    assert "driver shares are undefined" in said(made, "longitude has no spread")


def test_cannot_tell_and_the_reason():
    made = dataset()
    made["spreading_verdict"] = ("quantity", ["cannot tell", "exponential"])
    made["spreading_evidence"] = ("quantity", ["two laws fit alike", ""])
    sentence = said(made, "spreading of longitude cannot be told to follow one law")
    assert "two laws fit alike" in sentence
    assert "(the exponent is 1.00 (0.97 to 1.03))" in sentence
    made["spread_rate"] = (("quantity", "time"), np.full((2, TIMES.size), 0.31))
    assert "grows at 0.31 per d at 20 d" in said(made, "spreading of radius is exponential")


def test_joint_boxes_at_the_earliest_trust():
    made = dataset(trust=10.0)
    made = made.assign_coords(joint=["slot"])
    for suffix, shift in (("", 0.0), ("_low", -0.01), ("_high", 0.01)):
        made[f"joint_survival_probability{suffix}"] = (
            ("joint", "time"),
            (0.9 + shift + 0.0 * TIMES)[None],
        )
    sentence = said(made, "joint box 'slot'")
    assert "up to 10 d is 0.900 (0.890 to 0.910)" in sentence
    assert "trust horizon 10 d of 28 d" in sentence


def test_a_bare_result():
    bare = dataset()[["std", "trust_horizon"]].drop_attrs()
    bare["time"].attrs["units"] = "d"
    assert len(findings(bare)) == 2
    assert all(re.search(r"standard deviation of \w+ is", s) for s in findings(bare))


def test_numbers():
    assert number(0.123456) == "0.1235"
    assert number(1234567.0) == "1.235e+06"
    assert number(0.0) == "0"
    assert number(np.nan) == "unknown"
    assert number(-np.inf) == "minus infinity"
    assert estimate(12.3456, 12.0, 12.7, "km") == "12.3 km (12.0 to 12.7)"
    assert estimate(12.3456, 12.33, 12.36) == "12.346 (12.330 to 12.360)"
    assert estimate(12345.6, 12000.0, 12700.0, "m") == "12300 m (12000 to 12700)"
    assert estimate(12.3456, np.nan, np.nan, "1") == "12.35"
    assert estimate(2e-9, 1e-9, 3e-9, "m") == "2.00e-09 m (1.00e-09 to 3.00e-09)"
    assert estimate(1.0, 0.9996, 1.0) == "1.0000 (0.9996 to 1.0000)"
    assert percent(0.123, 0.1, 0.15) == "12 % (10 to 15)"


def test_rates_and_plateaus_of_laws():
    made = dataset()
    made["spreading_verdict"] = ("quantity", ["bounded", "exponential"])
    made["spreading_of"] = ("quantity", ["averaged over its period of 1 d", ""])
    for end, plateau, rate in (("", 4e-4, 0.3), ("_low", 3.61e-4, 0.28), ("_high", 4.41e-4, 0.32)):
        made[f"diffusion_plateau{end}"] = ("quantity", [plateau, np.nan])
        made[f"diffusion_rate{end}"] = ("quantity", [np.nan, rate])
        for name in ("exponent", "coefficient"):
            made[f"diffusion_{name}{end}"] = ("quantity", [np.nan, np.nan])
    sentence = said(made, "spreading of longitude (averaged over its period of 1 d) is bounded")
    assert "stays at 0.0200 deg (0.0190 to 0.0210)" in sentence
    sentence = said(made, "spreading of radius is exponential")
    assert "exp(k t) with k = 0.30 (0.28 to 0.32) per d" in sentence


def resonant(share=0.8, low=0.7, told=28.0):
    """The thrust drives longitude by noise of one turn a day."""
    made = dataset()
    pairs = {"frequency": 1.0, "width": 0.1, "share": share, "share_low": low, "share_high": 0.9}
    for name, value in pairs.items():
        made[f"resonance_{name}"] = (("source", "quantity"), [[value, np.nan], [np.nan] * 2])
    made["band_time"] = ("quantity", [told, np.nan])
    return made


def test_a_resonance_is_said_where_it_is_pronounced_and_trusted():
    sentence = said(resonant(), "longitude resonates with the noise source 'thrust'")
    assert "80 % (70 to 90) of the variance" in sentence
    assert "noise of periods 0.909 to 1.11 d, most at 1 d" in sentence
    assert "[trust horizon 28 d" in sentence
    for made in (resonant(low=0.4), resonant(told=30.0), dataset()):
        assert not [s for s in findings(made) if "resonates" in s]
    # nor of a source that gives little
    weak = resonant()
    weak["driver_total"] = 0.05 * weak["driver_total"]
    assert not [s for s in findings(weak) if "resonates" in s]


def test_a_slow_drive_is_said_where_there_is_no_resonance():
    """Bands of 28 d: fewer than five turns are periods longer than 5.6 d, here those above 7 d."""
    made = resonant(low=0.1)
    made["band_high"] = ("band", [1 / 28, 1 / 14, 1 / 7, 1.0, np.inf])
    shares = np.array([0.5, 0.3, 0.12, 0.05, 0.03])
    for end, factor in (("", 1.0), ("_low", 0.95), ("_high", 1.05)):
        values = np.full((2, 5, 2), np.nan)
        values[0, :, 0] = factor * shares
        made[f"band_share{end}"] = (("source", "band", "quantity"), values)
    sentence = said(made, "slow part of the noise source 'thrust' that drives longitude")
    assert "92 % (87 to 97) of the variance" in sentence
    assert "periods longer than 7 d" in sentence
    assert "trust horizon" in sentence
    made["band_share_low"] = 0.8 * made["band_share"]
    assert not [s for s in findings(made) if "slow part" in s]


def separating(growth):
    """Quantiles of exponents whose ln of the separation is growth(t) for the median."""
    made = dataset()
    with np.errstate(invalid="ignore"):
        middle = growth(TIMES) / TIMES
    made = made.reindex(level=[0.025, 0.5, 0.975], method="nearest")
    for end, factor in (("", 1.0), ("_low", 0.98), ("_high", 1.02)):
        values = factor * np.stack([0.8 * middle, middle, 1.2 * middle])
        made[f"lyapunov_exponent{end}"] = (("level", "time"), values)
    made["lyapunov_begin"] = ((), 0.0)
    return made


def test_how_neighbours_move_apart():
    """Up to the earliest trust horizon, of the two 20 d: exp(0.5 t) does, a power does not."""
    sentence = said(separating(lambda t: 0.5 * t), "Neighbouring motions")
    assert "move apart exponentially" in sentence
    assert "up to 20 d is 0.500 per d (0.490 to 0.510)" in sentence
    assert "95 % of the members have 0.4 to 0.6" in sentence
    assert "a factor e every 2 d" in sentence
    assert "[trust horizon 20 d of 28 d" in sentence
    shear = said(separating(lambda t: np.log1p(5.0 * t**2)), "Neighbouring motions")
    assert "do not move apart exponentially: up to 20 d by a factor of 2001 (median" in shear
    few = said(separating(lambda t: 0.1 * t), "Neighbouring motions")
    assert "do not move apart exponentially" in few
