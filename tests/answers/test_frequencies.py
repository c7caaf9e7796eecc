"""Which frequencies of the noise drive a quantity: kernels whose spectra are known."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import integrate

from nipc.answers.frequencies import NO_RESONANCE, band_edges, band_shares, resonance
from nipc.answers.response import Response, Stretch, transform
from nipc.problem.noise import BASES, Legendre

T, W = 20.0, 2 * np.pi


def kernel_on(basis, start, length, kernel):
    """Coefficients of kernel(s) on a basis's functions over an arc."""
    nodes, weights = np.polynomial.legendre.leggauss(400)
    u, w = 0.5 * (nodes + 1), 0.5 * weights
    return np.sqrt(length) * (basis.values(u) * w) @ kernel(start + length * u)


def response(kernel, arcs=20, terms=12, basis="legendre", **more):
    """The kernel in pieces, as a chain of arcs knows it."""
    family, length = BASES[basis](terms), T / arcs
    starts = length * np.arange(arcs)
    pieces = [Stretch(family, a, length, kernel_on(family, a, length, kernel)) for a in starts]
    return Response(tuple(pieces), 0.0, T, **more)


def turning(s):
    """x(T) of x'' + W^2 x = noise: sin(W (T - s)) / W."""
    return np.sin(W * (T - s)) / W


def spectrum(f):
    """|int_0^T sin(W s) / W exp(-2 pi i f s) ds|^2 in closed form; W = 2 pi g."""
    a, b = W - 2 * np.pi * f, W + 2 * np.pi * f
    value = ((np.exp(1j * a * T) - 1) / (1j * a) - (np.exp(-1j * b * T) - 1) / (-1j * b)) / (2j * W)
    return np.abs(value) ** 2


@pytest.mark.parametrize("basis", sorted(BASES))
def test_transforms_of_bases_keep_their_norm(basis):
    """2 int_0^F |Phi_k|^2 df -> 1 (Parseval); the rest beyond F falls as 1 / F."""
    frequencies, step = np.linspace(0.0, 60.0, 3001, retstep=True)
    power = 2 * np.abs(transform(BASES[basis](5), 2.0, frequencies)) ** 2
    np.testing.assert_allclose(integrate.simpson(power, dx=step, axis=1), 1.0, atol=0.02)


def test_transform_of_legendre_functions_are_spherical_bessel():
    """|Phi_k(f)| = sqrt((2k + 1) h) |j_k(pi f h)| (DLMF 10.54.2)."""
    from scipy.special import spherical_jn

    f, h = np.array([0.0, 0.3, 1.7, 6.1]), 1.5
    found = np.abs(transform(Legendre(4), h, f))
    k = np.arange(4)[:, None]
    exact = np.sqrt((2 * k + 1) * h) * np.abs(spherical_jn(k, np.pi * f * h))
    np.testing.assert_allclose(found, exact, atol=1e-12)


@pytest.mark.parametrize(("basis", "arcs", "terms"), [("legendre", 20, 12), ("completed", 1, 160)])
def test_an_oscillator_answers_at_its_own_frequency(basis, arcs, terms):
    found = response(turning, arcs, terms, basis)
    assert found.variance == pytest.approx(T / 2 / W**2, rel=2e-4)
    frequencies = np.array([0.2, 0.93, 0.999, 1.04, 3.3])
    np.testing.assert_allclose(
        found.power(frequencies)[0], 2 * spectrum(frequencies), rtol=2e-3, atol=1e-6
    )
    edges = band_edges(T, found.finest, 1.0)
    shares = band_shares(found, edges)
    assert shares[0].sum() == pytest.approx(1.0)
    whole = T / 2 / W**2
    for b in range(edges.size - 2):
        inside = np.linspace(edges[b] + 1e-9, edges[b + 1] + 1e-9, 4001)
        exact = integrate.simpson(2 * spectrum(inside), x=inside) / whole
        assert shares[0, b] == pytest.approx(exact, abs=1e-3)
    peak = resonance(found)
    assert peak.frequency == pytest.approx(1.0, abs=0.01)
    assert peak.share[0] > 0.9


def test_bands_are_in_order_and_the_centre_in_the_middle_of_one():
    edges = band_edges(28.0, 10.0, 1.0)
    assert edges[0] == 0.0
    assert np.isinf(edges[-1])
    assert np.all(np.diff(edges[:-1]) >= (1 - 1e-9) / 28.0)
    assert edges[-2] >= 10.0
    k = np.searchsorted(edges, 1.0)
    assert np.sqrt(edges[k - 1] * edges[k]) == pytest.approx(1.0)
    assert band_edges(3.0, 0.1).size >= 3  # not even one doubling


def test_slow_noise_is_no_resonance():
    """Brownian motion has the kernel 1: half of |sinc|^2 lies below 0.22 / T or so."""
    found = response(lambda s: np.ones_like(s))
    assert found.variance == pytest.approx(T)
    assert resonance(found) is NO_RESONANCE
    shares = band_shares(found, band_edges(T, found.finest))
    first = band_edges(T, found.finest)[1]
    exact = integrate.quad(lambda f: 2 * T * np.sinc(f * T) ** 2, 0, first)[0]
    assert shares[0, 0] == pytest.approx(exact, abs=1e-6)


def test_two_lines_share():
    """Kernels sin at 1 and 3 per unit of time with squares 1 : 2."""
    found = response(lambda s: np.sin(W * s) + np.sqrt(2) * np.sin(3 * W * s))
    assert resonance(found).frequency == pytest.approx(3.0, abs=0.02)
    assert resonance(found).share[0] == pytest.approx(2 / 3, abs=0.03)
    assert found.between(0.85, 1.15)[0] / found.variance == pytest.approx(1 / 3, abs=0.03)


def test_what_came_before_the_start_counts_for_coloured_noise():
    """u(T) itself has the Lorentzian 2 tau / (1 + (2 pi f tau)^2) x 2 whatever the start.

    Its kernel is sqrt(2/tau) exp(-(T - s)/tau), of which exp(-T/tau) is carried from before.
    """
    tau = 8.0

    def kernel(s):
        return np.sqrt(2 / tau) * np.exp(-(T - s) / tau)

    found = response(kernel, memory=(np.exp(-T / tau), tau))
    assert found.variance == pytest.approx(1.0, abs=1e-9)
    frequencies = np.array([0.0, 0.02, 0.1, 0.7])
    exact = 4 * tau / (1 + (2 * np.pi * frequencies * tau) ** 2)
    np.testing.assert_allclose(found.power(frequencies)[0], exact, rtol=1e-6)
    inside = found.between(0.0, 0.02)[0]
    assert inside == pytest.approx(2 / np.pi * np.arctan(2 * np.pi * 0.02 * tau), rel=1e-6)


def test_errors_of_coefficients_are_taken_out_and_covered():
    """200 noisy fits: the mean share is unbiased, its interval covers 0.95 +- 0.05."""
    rng = np.random.default_rng(61)
    clean = response(turning)
    edges = np.array([0.0, 0.8, 1.2, 4.0, np.inf])
    exact = band_shares(clean, edges)[0]
    noise = clean.variance / clean.count / 10  # a tenth of the variance is error
    values, hits = [], []
    for _ in range(200):
        pieces = [
            Stretch(s.basis, s.start, s.length,
                    s.coefficients + np.sqrt(noise) * rng.standard_normal(s.coefficients.size))
            for s in clean.stretches
        ]  # fmt: skip
        shares = band_shares(Response(tuple(pieces), 0.0, T, None, noise), edges)
        values.append(shares[0])
        hits.append((shares[1] <= exact + 1e-12) & (exact - 1e-12 <= shares[2]))
    assert np.mean(values, axis=0)[1] == pytest.approx(exact[1], abs=0.02)
    assert np.mean(hits) >= 0.9


def test_what_is_not_told_from_nothing_is_not_told():
    rng = np.random.default_rng(62)
    clean = response(turning)
    pieces = [
        Stretch(s.basis, s.start, s.length, rng.standard_normal(s.coefficients.size))
        for s in clean.stretches
    ]
    empty = Response(tuple(pieces), 0.0, T, None, 1.0)
    assert np.isnan(band_shares(empty, np.array([0.0, 1.0, np.inf]))).all()
    assert resonance(empty) is NO_RESONANCE
    # and what the paths' error could be is not told either
    doubt = 2 * np.sqrt(clean.variance)
    assert np.isnan(band_shares(clean, np.array([0.0, 1.0, np.inf]), doubt)).all()
