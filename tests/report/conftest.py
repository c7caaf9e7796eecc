"""Invented results, built after the contract of results.nc, with known answers inside.

`slot`: a geostationary slot kept for 28 days, two noise sources and an uncertain start; longitude
has a short trust horizon. `hard`: a chaotic motion with failed runs, no box, undefined shares and
values that leave every scale. `minimal`: one arc, and nothing that is optional.
"""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pytest
import xarray as xr

LEVELS = np.array([0.025, 0.25, 0.5, 0.75, 0.975])
STUDY = """# An invented study: names and numbers are made up.
title = "Slot watch over 28 days"
seed = 20260

[clock]
end = 28.0
"""


def _variable(data: Any, dims: tuple[str, ...], unit: str, long_name: str) -> xr.DataArray:
    return xr.DataArray(data, dims=dims, attrs={"units": unit, "long_name": long_name})


def _wilson(p: np.ndarray, n: int) -> tuple[np.ndarray, np.ndarray]:
    """Wilson's interval for a proportion (Wilson 1927), 95 %."""
    z = 1.959963984540054
    middle = (p + z * z / (2 * n)) / (1 + z * z / n)
    half = z / (1 + z * z / n) * np.sqrt(p * (1 - p) / n + z * z / (4 * n * n))
    return middle - half, middle + half


def slot_terms(members: int, times: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Contributions (term, member, quantity, time) and powers (term, source) of the slot's model.

    A linear response to two Brownian paths and to two start variables, and small second-order
    terms; homogeneous in each scale, as a chain's order-by-order contributions are.
    """
    rng = np.random.default_rng(4)
    span = times[-1] - times[0]
    step = np.diff(times, prepend=times[0]) / span
    u = (times - times[0]) / span
    kicks = rng.standard_normal((2, members, len(times))) * np.sqrt(step)
    radial, along = np.cumsum(kicks, axis=-1)
    slow = np.cumsum(along * step, axis=-1)
    swing = np.cos(2 * np.pi * times), np.sin(2 * np.pi * times)
    turn = sum(np.cumsum(kicks[0] * s, axis=-1) * s for s in swing)
    z1, z2 = rng.standard_normal((2, members, 1))
    one = np.ones((members, len(times)))
    orders = ["000", "100", "010", "001", "200", "020", "002", "110", "101", "011"]
    powers = np.array([[int(power) for power in order] for order in orders])
    radius = [
        42164.8 + 0.9 * swing[0] * one,
        0.9 * turn,
        0.7 * along,
        1.0 * z1 * swing[0] * one,
        0.02 * radial**2,
        0.03 * along**2,
        0.02 * z1**2 * one,
        0.01 * radial * along,
        0.02 * radial * z1,
        0.03 * along * z2,
    ]
    longitude = [
        75.0 + 0.02 * u * one,
        0.002 * turn,
        -0.055 * slow,
        -0.012 * z2 * u + 0.001 * z1,
        0 * one,
        0.004 * slow**2,
        0.0008 * z2**2 * u * one,
        0 * one,
        0.0005 * radial * z1 * u,
        0.004 * slow * z2 * u,
    ]
    energy = [
        -4.7268 * one,
        2e-7 * turn,
        6e-6 * along,
        2e-6 * z2 * one,
        0 * one,
        4e-7 * along**2,
        1e-7 * z2**2 * one,
        0 * one,
        0 * one,
        2e-7 * along * z2,
    ]
    stacked = [
        np.broadcast_to(np.stack(group), (10, members, len(times)))
        for group in (radius, longitude, energy)
    ]
    return np.stack(stacked, axis=2), powers


def _shares(terms: np.ndarray, powers: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """First and total shares (source, quantity, time) split by who takes part."""
    sources = powers.shape[1]
    takes = powers > 0
    part: dict[tuple[bool, ...], np.ndarray] = {}
    for support in {tuple(row) for row in takes.tolist()}:
        chosen = [i for i, row in enumerate(takes.tolist()) if tuple(row) == support]
        part[support] = terms[chosen].sum(axis=0).var(axis=0)
    whole = sum(part.values())
    first, total = np.zeros((2, sources, *whole.shape))
    with np.errstate(invalid="ignore", divide="ignore"):
        for j in range(sources):
            alone = tuple(i == j for i in range(sources))
            first[j] = part[alone] / whole
            total[j] = sum(v for s, v in part.items() if s[j]) / whole
    return first, total


def _frequencies(
    sources: int, quantities: int, noises: int, centre: float, end: float
) -> dict[str, xr.DataArray]:
    """Shares by band, all with a peak at one frequency; the sources that are no noise have none."""
    edges = centre * 2.0 ** ((np.arange(-14, 12) + 0.5) / 3)
    low = np.concatenate([[0.0], edges])
    share = np.full((sources, low.size, quantities), np.nan)
    middle = np.log(np.append(edges[0] / 2, edges) * 2 ** (1 / 6) / centre)
    share[:noises] = np.exp(-((middle / 0.2) ** 2))[:, None] + 0.02
    share /= share.sum(axis=1, keepdims=True)
    peak = np.full((sources, quantities), np.nan)
    peak[:noises] = centre
    per, sq = "1/d", ("source", "quantity")
    return {
        "band_low": _variable(low, ("band",), per, "low edge"),
        "band_high": _variable(np.append(edges, np.inf), ("band",), per, "high edge"),
        "band_share": _variable(share, ("source", "band", "quantity"), "1", "share by frequency"),
        "band_time": _variable(np.full(quantities, end), ("quantity",), "d", "time of the bands"),
        "resonance_frequency": _variable(peak, sq, per, "frequency of the peak"),
        "resonance_width": _variable(0.1 * peak, sq, per, "half-width"),
        "resonance_share": _variable(0 * peak + 0.8, sq, "1", "share within"),
        "resonance_share_low": _variable(0 * peak + 0.75, sq, "1", "share within, low"),
        "resonance_share_high": _variable(0 * peak + 0.85, sq, "1", "share within, high"),
    }


def _separation(times: np.ndarray, middle: np.ndarray, width: float) -> dict[str, xr.DataArray]:
    """Exponents about a middle curve, unknown at the start."""
    normal = np.array([-1.96, -0.674, 0.0, 0.674, 1.96])[:, None]
    values = np.where(times > times[0], middle * (1 + width * normal / 1.96), np.nan)
    return {
        "lyapunov_exponent": _variable(values, ("level", "time"), "1/d", "exponents"),
        "lyapunov_begin": _variable(np.array(times[0]), (), "d", "from when"),
    }


def build_slot(members: int = 600, outputs: int = 337) -> xr.Dataset:
    times = np.linspace(0.0, 28.0, outputs)
    terms, powers = slot_terms(members, times)
    values = terms.sum(axis=0)
    names = ["radius", "longitude", "energy"]
    units = ["km", "deg", "km^2/s^2"]
    low = np.array([42160.0, 74.95, np.nan])
    high = np.array([42170.0, 75.05, np.nan])
    mean, std = values.mean(axis=0), values.std(axis=0, ddof=1)
    inside = (values >= low[None, :, None]) & (values <= high[None, :, None])
    boxed = np.isfinite(low)[:, None]
    both = inside[:, :2].all(axis=1)
    probability = np.where(boxed, inside.mean(axis=0), np.nan)
    survival = np.where(boxed, np.logical_and.accumulate(inside, axis=2).mean(axis=0), np.nan)
    first, total = _shares(terms, powers)
    qt, sqt = ("quantity", "time"), ("source", "quantity", "time")
    growth = np.stack([2e-4 * np.sqrt(times), 0.02 * (times / 9.2) ** 2, 1e-4 * times])
    growth *= 1 + 0.06 * np.sin(2 * np.pi * times * np.array([1.0, 0.31, 0.5])[:, None])
    arcs = 56
    start = np.linspace(0.0, 28.0, arcs + 1)
    degree = np.where(np.arange(arcs) % 9 == 5, 2, 1)
    rng = np.random.default_rng(9)
    rate = np.stack([0.4 / (1 + times), 1.5 / (0.4 + times), 0.5 / (0.3 + times)])
    near = np.searchsorted(times, np.linspace(0.0, 28.0, 43)).clip(0, outputs - 1)
    data: dict[str, xr.DataArray] = {
        "mean": _variable(mean, qt, "", "mean"),
        "mean_low": _variable(mean - 1.96 * std / np.sqrt(members), qt, "", "mean, low"),
        "mean_high": _variable(mean + 1.96 * std / np.sqrt(members), qt, "", "mean, high"),
        "std": _variable(std, qt, "", "standard deviation"),
        "std_low": _variable(0.95 * std, qt, "", "standard deviation, low"),
        "std_high": _variable(1.05 * std, qt, "", "standard deviation, high"),
        "quantile": _variable(np.quantile(values, LEVELS, axis=0), ("level", *qt), "", "quantiles"),
        "box_low": _variable(low, ("quantity",), "", "lower edge of the box"),
        "box_high": _variable(high, ("quantity",), "", "upper edge of the box"),
        "spread_rate": _variable(rate, qt, "1/d", "spread rate"),
        "nonlinear_share": _variable(
            np.stack([0.002 + 1e-3 * times / 28, 0.02 * times / 28, 0.001 + 0 * times]),
            qt,
            "1",
            "share of variance beyond degree one",
        ),
        "diffusion_coefficient": _variable(
            np.array([8.5e-3, 2.4e-8, 6.4e-13]), ("quantity",), "", "diffusion coefficient"
        ),
        "diffusion_exponent": _variable(
            np.array([1.02, 2.8, 1.01]), ("quantity",), "1", "diffusion exponent"
        ),
        "diffusion_exponent_low": _variable(
            np.array([0.96, 2.6, 0.97]), ("quantity",), "1", "diffusion exponent, low"
        ),
        "diffusion_exponent_high": _variable(
            np.array([1.08, 3.0, 1.05]), ("quantity",), "1", "diffusion exponent, high"
        ),
        "spreading_verdict": _variable(
            np.array(["diffusive", "super-diffusive", "diffusive"]),
            ("quantity",),
            "",
            "kind of spreading",
        ),
        "exit_time_quantile": _variable(
            np.array(
                [[np.inf, 24.1, np.nan], [np.inf, np.inf, np.nan]] + 3 * [[np.inf, np.inf, np.nan]]
            ),
            ("level", "quantity"),
            "d",
            "exit time quantiles",
        ),
        "exit_driver_total": _variable(
            np.array([[0.5, 0.01, np.nan], [0.2, 0.72, np.nan], [0.4, 0.35, np.nan]]),
            ("source", "quantity"),
            "1",
            "total shares of the exit probability",
        ),
        "spreading_evidence": _variable(
            np.array(["a line fits best"] * 3), ("quantity",), "", "why"
        ),
        "joint_inside_probability": _variable(
            both.mean(axis=0)[None], ("joint", "time"), "1", "in"
        ),
        "joint_survival_probability": _variable(
            np.logical_and.accumulate(both, axis=1).mean(axis=0)[None], ("joint", "time"), "1", "in"
        ),
        "check_error": _variable(growth, qt, "1", "held-out path error over the spread"),
        "trust_horizon": _variable(
            np.array([28.0, 9.2, 28.0]), ("quantity",), "d", "trust horizon, paths"
        ),
        "trust_horizon_distribution": _variable(
            np.array([28.0, 21.0, 28.0]), ("quantity",), "d", "trust horizon, distribution"
        ),
        "allowance": _variable(
            np.array([[np.inf, np.inf, np.nan], [3.1e-8, 2.4e-8, np.nan], [np.nan, 1.1, np.nan]]),
            ("source", "quantity"),
            "",
            "largest intensity that keeps the box",
        ),
        "arc_start": _variable(start[:-1], ("arc",), "d", "start of the arc"),
        "arc_end": _variable(start[1:], ("arc",), "d", "end of the arc"),
        "arc_degree": _variable(degree, ("arc",), "1", "degree"),
        "arc_terms": _variable(np.where(degree == 1, 17, 106), ("arc",), "1", "terms"),
        "arc_runs": _variable(np.where(degree == 1, 24, 149), ("arc",), "1", "runs"),
        "arc_error": _variable(
            10 ** rng.normal(-3.6, 0.2, arcs), ("arc",), "1", "held-out error of the arc"
        ),
        "arc_note": _variable(
            np.array(["degree raised" if d == 2 else "" for d in degree]), ("arc",), "", "note"
        ),
        "arc_failed": _variable(
            np.where(np.arange(arcs) == 31, 3, 0), ("arc",), "1", "failed runs"
        ),
        "failed_position": _variable(
            np.array([[2.1, -0.3], [2.6, 0.4], [1.9, 0.2]]),
            ("failed_run", "direction"),
            "1",
            "runs that failed",
        ),
        "good_position": _variable(
            rng.standard_normal((40, 2)), ("good_run", "direction"), "1", "good runs"
        ),
        "band_low": _variable(np.array([0.0, 0.5, 0.9, 1.1]), ("band",), "1/d", "from"),
        "band_high": _variable(np.array([0.5, 0.9, 1.1, np.inf]), ("band",), "1/d", "to"),
        "band_share": _variable(
            np.stack([np.full((4, 3), 0.25), np.full((4, 3), 0.25), np.full((4, 3), np.nan)]),
            ("source", "band", "quantity"),
            "1",
            "share of what the source gives",
        ),
        "band_time": _variable(np.array([28.0, 9.0, 28.0]), ("quantity",), "d", "time"),
        "lyapunov_exponent": _variable(
            np.log1p(times)[None] / np.maximum(times, 0.1) * np.linspace(0.9, 1.1, 5)[:, None],
            ("level", "time"),
            "1/d",
            "largest exponent",
        ),
        "degree_norm": _variable(
            np.stack(
                [
                    0.99 + 0 * start[:-1],
                    10 ** rng.normal(-2, 0.2, arcs),
                    np.where(degree == 2, 10 ** rng.normal(-3.6, 0.2, arcs), np.nan),
                ],
                axis=1,
            ),
            ("arc", "degree"),
            "1",
            "norm of the coefficients of a degree",
        ),
        "member_quantity": _variable(values[:40], ("member", *qt), "", "some members"),
        "direct_quantity": _variable(
            values[40:48] + std * growth * rng.standard_normal((8, 3, 1)),
            ("check_member", *qt),
            "",
            "direct runs",
        ),
        "expansion_quantity": _variable(
            values[40:48], ("check_member", *qt), "", "expansion at the same germ"
        ),
        "panel_contribution": _variable(
            terms[..., near],
            ("panel_term", "panel_member", "quantity", "panel_time"),
            "",
            "contribution of each order",
        ),
        "panel_power": _variable(powers, ("panel_term", "source"), "1", "powers of the scales"),
    }
    for name, estimate in (("inside_probability", probability), ("survival_probability", survival)):
        lower, upper = _wilson(estimate, members)
        data[name] = _variable(estimate, qt, "1", name.replace("_", " "))
        data[name + "_low"] = _variable(lower, qt, "1", name + ", low")
        data[name + "_high"] = _variable(upper, qt, "1", name + ", high")
    for name, share in (("driver_first", first), ("driver_total", total)):
        data[name] = _variable(share, sqt, "1", name.replace("_", " "))
        data[name + "_low"] = _variable(np.clip(share - 0.03, 0, 1), sqt, "1", name + ", low")
        data[name + "_high"] = _variable(np.clip(share + 0.03, 0, 1), sqt, "1", name + ", high")
    data |= _frequencies(3, 3, 2, 1.0, 28.0) | _separation(times, 1.5 / (1 + times), 0.3)
    return xr.Dataset(
        data,
        coords={
            "time": ("time", times, {"units": "d", "long_name": "time"}),
            "quantity": names,
            "quantity_unit": ("quantity", units),
            "source": ["radial", "tangential", "start"],
            "source_kind": ("source", ["noise", "noise", "start"]),
            "level": LEVELS,
            "panel_time": times[near],
            "joint": ["slot"],
            "degree": [1, 2, 3],
            "direction": ["x", "radial[1]"],
        },
        attrs={
            "title": "Slot watch over 28 days",
            "seed": 20260,
            "time_unit": "d",
            "tolerance": 0.02,
            "propagator_runs": 2094,
            "run_equivalents": 45.4,
            "budget": 200,
            "wall_time": 41.7,
            "failed_runs": 3,
            "failures": json.dumps(
                [
                    {"reason": "time limit of 60 s passed", "count": 2},
                    {"reason": "exit code 3: step size too small", "count": 1},
                ]
            ),
            "findings": json.dumps(
                [
                    "Longitude is in its box of 74.95 to 75.05 deg at day 28 with probability 0.86 "
                    "(0.83 to 0.89), past the trust horizon of its paths at day 9.2.",
                    "It drives 66 % of the spread of longitude. [trust horizon 9.2 d]",
                ]
            ),
            "noise_bases": json.dumps([{"source": "radial", "basis": "legendre", "terms": 5}]),
            "notes": json.dumps(["Arcs of half a day."]),
            "study": STUDY,
            "versions": json.dumps({"nipc": "0.1.0", "numpy": np.__version__}),
            "created": "2026-12-01T07:00:00+00:00",
            "monitoring_interval": 2.0 / 24,
        },
    )


def build_hard() -> xr.Dataset:
    """Chaos: spread grows by e^20, half of the runs fail, shares undefined at the start."""
    times = np.linspace(0.0, 50.0, 401)
    rng = np.random.default_rng(8)
    names = ["x", "<script>alert('q')</script>", "an integral of motion with a very long name $E$"]
    spread = np.stack(
        [1e-6 * np.exp(0.5 * times), np.minimum(1e-3 * np.exp(0.4 * times), 0.8), 0 * times]
    )
    mean = np.stack([np.sin(times), 3 + 0 * times, 0.125 + 0 * times])
    z = rng.standard_normal((30, 3, 1)) * (1 + 0.2 * np.sin(times + rng.uniform(0, 6, (30, 3, 1))))
    members = mean + spread * z
    normal = np.array([-1.959964, -0.67449, 0.0, 0.67449, 1.959964])
    sources = [
        "white <b>noise</b>",
        "_hidden",
        "noise three",
        "noise four",
        "noise five",
        "noise six",
        "noise seven",
        "start",
        "mass & drag",
    ]
    share = rng.dirichlet(np.ones(9), size=(3, 401)).transpose(2, 0, 1).cumsum(axis=2)
    share /= share.sum(axis=0) * 1.1
    share[:, 2] = np.nan
    share[:, :, 0] = np.nan
    rate = np.stack([0.5 + 0.3 * np.sin(times), np.where(times < 17, 0.4, 0.0), np.nan * times])
    qt = ("quantity", "time")
    error = np.minimum(1e-5 * np.exp(0.45 * times) * np.ones((3, 1)), 1.4)
    error[2] = np.nan
    arcs = np.concatenate([np.arange(0, 20, 2.0), np.arange(20, 50.01, 0.5)])
    count = len(arcs) - 1
    data = {
        "mean": _variable(mean, qt, "", "mean"),
        "std": _variable(spread, qt, "", "standard deviation"),
        "quantile": _variable(
            mean + spread * normal[:, None, None], ("level", *qt), "", "quantiles"
        ),
        "box_low": _variable(np.array([-np.inf, np.nan, np.nan]), ("quantity",), "", "low"),
        "box_high": _variable(np.array([np.inf, np.nan, np.nan]), ("quantity",), "", "high"),
        "inside_probability": _variable(np.full((3, 401), np.nan), qt, "1", "inside"),
        "spread_rate": _variable(rate, qt, "1/time", "spread rate"),
        "driver_first": _variable(0.8 * share, ("source", *qt), "1", "first"),
        "driver_total": _variable(share, ("source", *qt), "1", "total"),
        "spreading_verdict": _variable(
            np.array(["exponential", "exponential, then a plateau", "cannot tell"]),
            ("quantity",),
            "",
            "kind",
        ),
        "check_error": _variable(error, qt, "1", "error"),
        "trust_horizon": _variable(np.array([16.9, 16.9, np.nan]), ("quantity",), "", "trust"),
        "trust_horizon_distribution": _variable(
            np.array([16.9, 50.0, np.nan]), ("quantity",), "", "trust"
        ),
        "arc_start": _variable(arcs[:-1], ("arc",), "", "start"),
        "arc_end": _variable(arcs[1:], ("arc",), "", "end"),
        "arc_degree": _variable(rng.integers(2, 6, count), ("arc",), "1", "degree"),
        "arc_runs": _variable(rng.integers(30, 400, count), ("arc",), "1", "runs"),
        "arc_error": _variable(
            np.where(np.arange(count) == 4, np.nan, 10 ** rng.normal(-2, 0.8, count)),
            ("arc",),
            "1",
            "error",
        ),
        "arc_failed": _variable(rng.poisson(12, count), ("arc",), "1", "failed"),
        "member_quantity": _variable(members, ("member", *qt), "", "members"),
        "direct_quantity": _variable(
            members[:5] + spread * error[0], ("check_member", *qt), "", "direct"
        ),
        "expansion_quantity": _variable(members[:5], ("check_member", *qt), "", "expansion"),
    }
    data |= _frequencies(9, 3, 7, 0.02, 16.9) | _separation(times, 0.5 + 1 / (1 + times), 0.2)
    kinds = ["noise"] * 7 + ["start", "parameter"]
    return xr.Dataset(
        data,
        coords={
            "time": times,
            "quantity": names,
            "quantity_unit": ("quantity", ["m", "<i>", ""]),
            "source": sources,
            "source_kind": ("source", kinds),
            "level": LEVELS,
        },
        attrs={
            "title": "</title><script>alert('title')</script> $\\alpha$",
            "time_unit": "",
            "tolerance": 0.05,
            "propagator_runs": 41000,
            "run_equivalents": 507.0,
            "failed_runs": 812,
            "failures": json.dumps(
                [
                    {"reason": "<img src=x onerror=alert(1)>" * 6, "count": 700},
                    {"reason": "not finite", "count": 112},
                ]
            ),
            "findings": json.dumps(["The spread of x grows <script>alert('f')</script> e-fold."]),
            "study": "title = '</pre><script>alert(1)</script>'\n",
            "seed": 1,
        },
    )


def build_minimal() -> xr.Dataset:
    times = np.linspace(0.0, 10.0, 21)
    qt = ("quantity", "time")
    return xr.Dataset(
        {
            "mean": _variable(0.5 * times[None], qt, "m", "mean"),
            "std": _variable(np.sqrt(times**3 / 3)[None], qt, "m", "standard deviation"),
        },
        coords={"time": ("time", times, {"units": "s"}), "quantity": ["position"]},
    )


@pytest.fixture(scope="session")
def slot() -> xr.Dataset:
    return build_slot()


@pytest.fixture(scope="session")
def hard() -> xr.Dataset:
    return build_hard()


@pytest.fixture(scope="session")
def minimal() -> xr.Dataset:
    return build_minimal()


@pytest.fixture(scope="session")
def pages(slot: xr.Dataset, hard: xr.Dataset, minimal: xr.Dataset) -> dict[str, str]:
    """The text of each result's page."""
    from nipc.report import page

    return {"slot": page.render(slot), "hard": page.render(hard), "minimal": page.render(minimal)}
