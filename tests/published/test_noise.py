"""Noise bases against the theory of the Wiener process.

Sources: Loeve (1978), Probability Theory II, and Ghanem & Spanos (1991), Stochastic Finite
Elements, for the Karhunen-Loeve expansion of the Wiener process (eigenvalues
T^2 / ((k - 1/2)^2 pi^2), from memory); Uhlenbeck & Ornstein (1930) for the Gauss-Markov process;
scipy's quadrature throughout.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from nipc.problem.noise import (
    BASES,
    CompletedKarhunenLoeve,
    KarhunenLoeve,
    Legendre,
    NoiseModel,
    Source,
)
from nipc.problem.noise.projection import projection


@pytest.mark.parametrize("length", [0.5, 2.0, 7.0])
def test_eigenvalues_of_the_wiener_process(length):
    """The covariance min(s, t), discretised, has the eigenvalues of the expansion."""
    n = 1500
    t = (np.arange(n) + 0.5) * length / n
    found = np.linalg.eigvalsh(np.minimum.outer(t, t) * length / n)[::-1][:5]
    w = KarhunenLoeve(5).frequencies
    assert found == pytest.approx(length**2 / w**2, rel=1e-4)
    # the path's mean square in each term is the eigenvalue: int (h^1/2 F_k(u))^2 h du
    for k in range(5):

        def square(u, k=k):
            return float(KarhunenLoeve(5).integrals(np.array([u]))[k, 0] ** 2)

        value, _ = quad(square, 0, 1, epsabs=1e-12, limit=200)
        assert length**2 * value == pytest.approx(length**2 / w[k] ** 2, rel=1e-9)


@pytest.mark.parametrize("terms", [5, 20, 80])
def test_path_error_falls_as_one_over_terms_and_grows_with_the_interval(terms):
    """Mean-square path error over the arc is h/(pi^2 N), to first order in 1/N."""
    for h in (1.0, 4.0):
        lost = (1 - KarhunenLoeve(terms).path_retained()) * h / 2  # mean of E W^2 is h/2
        assert lost == pytest.approx(h / (np.pi**2 * terms), rel=0.3 / terms**2 + 1e-3)


@pytest.mark.parametrize("terms", [5, 20, 80])
def test_end_value_loses_twice_that(terms):
    """2 h/(pi^2 N) of the variance h; nothing with the completed and the Legendre basis."""
    lost = 1 - KarhunenLoeve(terms).end_retained()
    assert lost == pytest.approx(2 / (np.pi**2 * terms), rel=0.1 / terms)
    for family in (CompletedKarhunenLoeve, Legendre):
        assert family(terms).end_retained() == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize(
    ("phase", "terms", "name"),
    [(p, n, name) for p, n in ((np.pi / 2, 4), (2 * np.pi, 8)) for name in sorted(BASES)],
)
def test_share_of_an_oscillators_response(phase, terms, name):
    """int cos(phase (1 - u)) f_k(u) du by scipy's adaptive quadrature."""
    basis = BASES[name](terms)
    total, _ = quad(lambda u: np.cos(phase * (1 - u)) ** 2, 0, 1, epsabs=1e-14)
    kept = 0.0
    for k in range(terms):

        def product(u, k=k):
            return float(np.cos(phase * (1 - u)) * basis.values(np.array([u]))[k, 0])

        kept += quad(product, 0, 1, epsabs=1e-13, limit=400)[0] ** 2
    assert 1 - basis.response_retained(phase) == pytest.approx(1 - kept / total, abs=1e-11)


@pytest.mark.parametrize("name", sorted(BASES))
def test_bases_are_orthonormal_with_true_integrals(name):
    basis = BASES[name](9)
    assert projection(basis, basis) == pytest.approx(np.eye(9), abs=1e-12)
    for k in range(9):

        def value(u, k=k):
            return float(basis.values(np.array([u]))[k, 0])

        found = basis.integrals(np.array([0.0, 0.3, 0.8, 1.0]))[k]
        exact = [quad(value, 0, u, epsabs=1e-13)[0] for u in (0.0, 0.3, 0.8, 1.0)]
        assert found == pytest.approx(exact, abs=1e-11)


@pytest.mark.parametrize("name", sorted(BASES))
def test_path_share_in_closed_form(name):
    basis = BASES[name](6)
    nodes, weights = np.polynomial.legendre.leggauss(200)
    squares = basis.integrals(0.5 * (nodes + 1)) ** 2
    assert basis.path_retained() == pytest.approx(2 * np.sum(squares @ (0.5 * weights)), abs=1e-12)


def test_covariance_of_the_gauss_markov_process():
    """E xi(s) xi(t) = sigma^2 exp(-|t - s|/tau) (Uhlenbeck & Ornstein 1930), for many terms.

    The part that N terms miss falls as 1/N: with 60 terms on two correlation times, below 2 %.
    """
    tau, sigma = 0.5, 3.0
    source = Source("u", "", sigma, "gauss-markov", tau)
    model = NoiseModel((source,), (Legendre(60),), 1.0, 2.0)
    t = np.array([1.0, 1.13, 1.5, 1.9, 2.0])
    shapes = model.shapes[0].values(t)
    exact = sigma**2 * np.exp(-np.abs(t[:, None] - t) / tau)
    assert shapes.T @ shapes == pytest.approx(exact, abs=0.02 * sigma**2)
    # the running integral is the integral of the values
    paths = model.realise(np.random.default_rng(1).standard_normal((3, model.size)))
    fine = np.linspace(1.0, 2.0, 20_001)
    table = paths.table(fine)[:, :, 0]
    step = fine[1] - fine[0]
    exact = step * (table[:, 1:] + table[:, :-1]).sum(axis=1) / 2
    assert paths.increments(np.array([1.0, 2.0]))[:, 0, 0] == pytest.approx(exact, abs=1e-6)
