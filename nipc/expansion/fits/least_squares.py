"""Least squares: min Σ_i w_i |y_i − Σ_t c_t Ψ_t(x_i)|², one QR factorisation for all outputs.

Leave-one-out residuals come in closed form, r_i / (1 − h_i), h_i = Σ_k Q_ik² (Allen 1974).
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import lapack, qr, solve_triangular

from nipc.arrays import FloatArray
from nipc.errors import FitError
from nipc.expansion.fits.fit import Fit, checked, spread_of

_WORST_CONDITION = 1e10
_FULL_LEVERAGE = 1e-9  # a run with 1 − h below this has no leave-one-out residual of its own


def christoffel_weights(matrix: FloatArray) -> FloatArray:
    """w(x) = terms / Σ_t Ψ_t(x)² for a basis matrix (terms, runs): (runs,).

    Cohen & Migliorati (2017), SMAI Journal of Computational Mathematics 3.
    """
    return np.asarray(matrix.shape[0] / np.einsum("tn,tn->n", matrix, matrix))


def least_squares(
    matrix: FloatArray, outputs: FloatArray, weights: FloatArray | None = None
) -> Fit:
    """Fit outputs (runs, outputs) on a basis matrix (terms, runs), weights (runs,).

    FitError with fewer runs than terms, when the nodes do not determine all terms, or when an
    output is not finite.
    """
    n_terms, n_runs = matrix.shape
    if n_runs < n_terms:
        raise FitError(
            f"{n_runs} runs cannot determine {n_terms} terms by least squares: at least {n_terms} "
            f"are needed and {round(1.4 * n_terms)} are sound"
        )
    outputs, weights = checked(matrix, outputs, weights)
    root = np.sqrt(weights)
    q, r = qr((matrix * root).T, mode="economic", overwrite_a=True, check_finite=False)
    q, r = np.asarray(q), np.asarray(r)
    _refuse_undetermined(r, n_runs)
    plain = bool(np.all(weights == 1.0))
    scaled = outputs if plain else outputs * root[:, None]
    projected = q.T @ scaled
    coefficients = solve_triangular(r, projected, check_finite=False)

    leverage = np.minimum(np.einsum("rk,rk->r", q, q), 1.0)
    residual = q @ projected
    np.subtract(scaled, residual, out=residual)
    # rows scaled by √w: Σ w (r/(1−h))² / Σ w is the mean under the germ's own measure
    residual *= (1.0 / np.maximum(1.0 - leverage, _FULL_LEVERAGE))[:, None]
    loo = np.sqrt(np.einsum("ro,ro->o", residual, residual) / n_runs)

    n_outputs = outputs.shape[1]
    correction = few_runs_factor(r, n_runs)
    return Fit(
        coefficients,
        loo,
        spread_of(outputs, weights),
        np.full(n_outputs, correction),
        leverage,
        np.full(n_outputs, float(n_terms)),
    )


def few_runs_factor(r: FloatArray, n_runs: int) -> float:
    """Factor on the squared leave-one-out error, n/(n − P) · (1 + tr (ΨΨᵀ)⁻¹).

    Chapelle, Vapnik & Bengio (2002), Machine Learning 48; infinite when runs equal terms.
    """
    n_terms = r.shape[0]
    if n_runs <= n_terms:
        return float("inf")
    inverse = solve_triangular(r, np.eye(n_terms), check_finite=False)
    return float(n_runs / (n_runs - n_terms) * (1.0 + np.sum(inverse * inverse)))


def _refuse_undetermined(r: FloatArray, n_runs: int) -> None:
    reciprocal, _ = lapack.dtrcon(r)
    if reciprocal * _WORST_CONDITION >= 1.0:
        return
    pivots = np.abs(np.diag(qr(r, mode="r", pivoting=True)[0]))
    rank = int(np.sum(pivots > pivots[0] / _WORST_CONDITION))
    raise FitError(
        f"the {n_runs} nodes determine only {rank} of the {r.shape[0]} terms: some nodes are "
        "equal or lie on a curve of the basis; add other nodes"
    )
