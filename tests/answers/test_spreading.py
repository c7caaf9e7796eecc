"""Growth rates, tangent maps, averages over a period."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import expm

from nipc.answers.averaging import detect_period, moving_average
from nipc.answers.lyapunov import TangentProduct, lyapunov_exponents
from nipc.answers.spreading import spread_rate
from nipc.errors import InputError


def test_rate_of_an_exponential_is_exact_and_of_a_power_near():
    times = np.linspace(1.0, 11.0, 120)
    variance = np.stack([np.exp(2 * 0.7 * times), times**3, np.zeros_like(times)], axis=1)
    rate = spread_rate(variance, times)
    np.testing.assert_allclose(rate[:, 0], 0.7, rtol=1e-10)
    inner = slice(10, -10)
    np.testing.assert_allclose(rate[inner, 1], 1.5 / times[inner], rtol=0.02)
    assert np.isnan(rate[:, 2]).all()


def test_rate_withstands_one_odd_value_and_uneven_times():
    rng = np.random.default_rng(1)
    times = np.sort(rng.uniform(0, 10, 150))
    variance = np.exp(2 * 0.3 * times)
    variance[70] *= 30.0
    np.testing.assert_allclose(spread_rate(variance, times), 0.3, rtol=1e-6)


def test_rate_of_few_times_and_of_a_sharp_start():
    times = np.array([0.0, 1.0, 2.0, 3.0])
    variance = np.array([0.0, 1.0, np.e**2, np.e**4])
    rate = spread_rate(variance, times)
    assert np.isnan(rate[0])
    np.testing.assert_allclose(rate[1:], 1.0, rtol=1e-9)


def test_exponents_of_a_saddle_and_a_centre():
    """x' = A x with eigenvalues +-0.8 and +-2i: exponents 0.8, 0, 0, -0.8, in any arcs."""
    rng = np.random.default_rng(2)
    block = np.zeros((4, 4))
    block[:2, :2] = [[0.0, 1.0], [0.64, 0.0]]
    block[2:, 2:] = [[0.0, 2.0], [-2.0, 0.0]]
    turn = np.linalg.qr(rng.standard_normal((4, 4)))[0]
    durations = rng.uniform(0.5, 2.0, 200)
    maps = np.stack([expm(turn @ block @ turn.T * t) for t in durations])
    exponents = lyapunov_exponents(np.stack([maps] * 3), durations, np.array([1.0, 10, 0.1, 1]))
    # the frame settles within a few units of time; its remains fall as 1/t
    np.testing.assert_allclose(
        np.sort(exponents[:, -1], axis=1), [[-0.8, 0, 0, 0.8]] * 3, atol=6 / durations.sum()
    )
    # volume is kept: the exponents' sum is the trace, zero, at every time
    assert np.abs(exponents.sum(axis=2)).max() < 1e-12


def test_scale_makes_components_comparable():
    """One map that swaps two axes: in z = x / scale it is [[0, a s2/s1], [b s1/s2, 0]]."""
    swap = np.array([[[0.0, 2.0], [3.0, 0.0]]])
    product = TangentProduct(1, 2, np.array([10.0, 1.0]))
    product.advance(swap, 0.5)
    np.testing.assert_allclose(product.exponents[0], 2 * np.log([3.0 * 10.0, 2.0 / 10.0]))


def test_lost_members_stay_lost():
    product = TangentProduct(2, 2)
    maps = np.stack([np.eye(2) * np.e, np.full((2, 2), np.nan)])
    product.advance(maps, 1.0)
    product.advance(np.stack([np.eye(2)] * 2), 1.0)
    np.testing.assert_allclose(product.exponents[0], 0.5)
    assert np.isnan(product.exponents[1]).all()


def test_average_over_a_period_leaves_the_slow_part():
    times = np.sort(np.append(np.linspace(0, 20, 801), np.random.default_rng(3).uniform(0, 20, 50)))
    slow = 1.0 + 0.3 * times
    fast = np.sin(2 * np.pi * times / 1.7 + 0.4)
    values = np.stack([slow + fast, slow], axis=0)[:, :, None]
    averaged, middle = moving_average(values, times, 1.7)
    assert middle[0] >= 0.85
    assert middle[-1] <= 20 - 0.85 + 1e-9
    np.testing.assert_allclose(averaged[1, :, 0], 1.0 + 0.3 * middle, rtol=1e-9)
    # trapezoids of a sine of period 1.7 at steps of 0.025: error (2 pi h / P)^2 / 12 of it
    np.testing.assert_allclose(averaged[0, :, 0], 1.0 + 0.3 * middle, atol=1e-3)


def test_average_refuses_what_it_cannot_do():
    times = np.linspace(0, 10, 101)
    values = np.zeros((1, 101, 1))
    with pytest.raises(InputError, match="horizon of 10"):
        moving_average(values, times, 12.0)
    with pytest.raises(InputError, match=r"at most 0\.05 apart, not 0\.1"):
        moving_average(values, times, 0.2)


def test_period_found_or_not():
    times = np.linspace(0.0, 50.0, 500)
    rng = np.random.default_rng(4)
    for period in (1.1, 3.3, 12.5):
        series = 5.0 + 0.2 * times + np.cos(2 * np.pi * times / period + 1.0)
        found = detect_period(series + 0.2 * rng.standard_normal(500), times)
        assert found == pytest.approx(period, rel=0.01)
    assert detect_period(rng.standard_normal(500), times) is None
    assert detect_period(np.cumsum(rng.standard_normal(500)), times) is None
    assert detect_period(0.2 * times, times) is None
    assert detect_period(np.ones(500), times) is None
    assert detect_period(np.cos(2 * np.pi * times / 40.0), times) is None  # but one turn and a bit
