"""Diffusion laws and Lyapunov exponents whose values are published."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import jv

from nipc.answers.diffusion import spreading_law
from nipc.answers.lyapunov import Stretching, TangentProduct
from nipc.answers.moments import MomentAccumulator
from nipc.answers.spreading import spread_rate


def standard_map(kick, members, turns, seed):
    """p' = p + K sin x, x' = x + p': momenta (n, T, 1) from p = 0 and a uniform angle."""
    rng = np.random.default_rng(seed)
    x, p = rng.uniform(0, 2 * np.pi, members), np.zeros(members)
    values = np.zeros((members, turns + 1, 1))
    for t in range(1, turns + 1):
        p = p + kick * np.sin(x)
        x = np.mod(x + p, 2 * np.pi)
        values[:, t, 0] = p
    return values


@pytest.mark.parametrize("kick", [8.5, 10.0, 15.5])
def test_standard_map_at_large_kicks(kick):
    """Rechester & White 1980: D = K^2/2 (1/2 - J2 - J1^2 + J2^2 + J3^2), D = <(dp)^2> / 2t.

    Quasilinear K^2/4 with its corrections, for kicks away from accelerator modes near 2 pi k. The
    formula's own error is O(1/K^2): 4 % is allowed beyond the interval.
    """
    moments = MomentAccumulator()
    moments.update(standard_map(kick, 20_000, 100, 31))
    found = spreading_law(moments.batch_variance[:, 5:, 0], np.arange(101.0)[5:], origin=0.0)
    assert found.verdict == "diffusive"
    quasilinear = kick**2 / 4
    j1, j2, j3 = (jv(n, kick) for n in (1, 2, 3))
    expected = kick**2 / 2 * (0.5 - j2 - j1**2 + j2**2 + j3**2)
    assert found.coefficient.low * 0.96 <= expected <= found.coefficient.high * 1.04
    if abs(expected / quasilinear - 1) > 0.2:  # the correction is seen, not only allowed for
        assert abs(found.coefficient.value - quasilinear) > abs(found.coefficient.value - expected)


def test_brownian_linear_and_its_integral_cubic():
    """Var W = t; Var int W = t^3 / 3: 2 D t^3 with D = 1/6."""
    rng = np.random.default_rng(32)
    times = np.linspace(0.0, 4.0, 401)
    h = times[1]
    linear, cubic = MomentAccumulator(), MomentAccumulator()
    for _ in range(4):
        # increments of W and of its integral over a step, jointly Gaussian and exact
        dw = np.sqrt(h) * rng.standard_normal((5000, 400))
        bridge = np.sqrt(h**3 / 12) * rng.standard_normal((5000, 400))
        w = np.concatenate([np.zeros((5000, 1)), dw.cumsum(axis=1)], axis=1)
        step = h * w[:, :-1] + 0.5 * h * dw + bridge
        integral = np.concatenate([np.zeros((5000, 1)), step.cumsum(axis=1)], axis=1)
        linear.update(w[:, :, None])
        cubic.update(integral[:, :, None])
    found = spreading_law(linear.batch_variance[:, :, 0], times)
    assert found.verdict == "diffusive"
    assert found.exponent.low < 1.0 < found.exponent.high
    assert found.coefficient.low < 0.5 < found.coefficient.high
    found = spreading_law(cubic.batch_variance[:, :, 0], times)
    assert found.verdict == "super-diffusive"
    assert found.exponent.low < 3.0 < found.exponent.high
    assert found.coefficient.low < 1 / 6 < found.coefficient.high


def test_cat_map():
    """Arnold's cat map: exponents +-ln((3 + sqrt 5) / 2) a step."""
    product = TangentProduct(1, 2)
    for _ in range(400):
        product.advance(np.array([[[2.0, 1.0], [1.0, 1.0]]]), 1.0)
    exact = np.log((3 + np.sqrt(5)) / 2)
    np.testing.assert_allclose(product.exponents[0], [exact, -exact], atol=2 / 400)
    # the matrix is symmetric: its powers stretch by just that from the first step on
    stretching = Stretching(1, 2)
    for step in range(1, 401):
        found = stretching.after(np.array([[[2.0, 1.0], [1.0, 1.0]]]))[0]
        assert found == pytest.approx(step * exact, rel=1e-12)
        stretching.advance(np.array([[[2.0, 1.0], [1.0, 1.0]]]))


def test_linear_saddle():
    """x' = v, v' = k^2 x in units x, v / k: sigma_max = exp(k t) in any arcs, by algebra."""
    k, stretching, t = 0.8, Stretching(1, 2), 0.0
    for h in np.random.default_rng(34).uniform(0.1, 3.0, 50):
        c, s = np.cosh(k * h), np.sinh(k * h)
        stretching.advance(np.array([[[c, s], [s, c]]]))
        t += h
    assert stretching.after(np.eye(2)[None])[0] / t == pytest.approx(k, rel=1e-12)


def test_standard_map_exponent():
    """Chirikov 1979: at large K the exponent is ln(K/2); K = 10, to 2 %."""
    kick, turns, members = 10.0, 400, 200
    values = standard_map(kick, members, turns, 33)[:, :, 0]
    rng = np.random.default_rng(33)
    x = rng.uniform(0, 2 * np.pi, members)
    product = TangentProduct(members, 2)
    for t in range(turns):
        bend = kick * np.cos(x)
        x = np.mod(x + values[:, t + 1], 2 * np.pi)
        maps = np.empty((members, 2, 2))
        maps[:, 0, 0], maps[:, 0, 1] = 1.0 + bend, 1.0  # x' of (x, p)
        maps[:, 1, 0], maps[:, 1, 1] = bend, 1.0
        product.advance(maps, 1.0)
    assert product.exponents[:, 0].mean() == pytest.approx(np.log(kick / 2), rel=0.02)


def test_spread_rate_of_a_saddle():
    """x' = v, v' = k^2 x with noise: variance (sinh 2kt / 4k - t/2) s^2/k^2, rate tending to k."""
    k = 1.3
    times = np.linspace(0.0, 6.0, 241)
    variance = (np.sinh(2 * k * times) / (4 * k) - times / 2) / k**2
    rate = spread_rate(variance, times, window=0.2)
    exact = 0.5 * (np.cosh(2 * k * times) / 2 - 0.5) / k**2 / np.where(variance > 0, variance, 1)
    np.testing.assert_allclose(rate[80:-5], exact[80:-5], rtol=2e-3)
    assert rate[-1] == pytest.approx(k, rel=1e-3)
