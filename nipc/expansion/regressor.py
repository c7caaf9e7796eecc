"""ChaosRegressor: a polynomial chaos expansion as a scikit-learn estimator."""

from __future__ import annotations

from typing import Any, Self

import numpy as np
from sklearn.base import BaseEstimator, MultiOutputMixin, RegressorMixin
from sklearn.utils.validation import check_is_fitted, validate_data

from nipc.arrays import FloatArray
from nipc.errors import FitError
from nipc.expansion.basis import ProductBasis
from nipc.expansion.fits.fit import Fit, Fitter
from nipc.expansion.fits.least_angle import least_angle
from nipc.expansion.fits.least_squares import least_squares
from nipc.expansion.indices import hyperbolic
from nipc.expansion.recurrence import recurrence_of, recurrence_of_points

_FITTERS: dict[str, Fitter] = {"least_angle": least_angle, "least_squares": least_squares}


class ChaosRegressor(MultiOutputMixin, RegressorMixin, BaseEstimator):  # type: ignore[misc]
    """f(x) ≈ Σ_t c_t Ψ_t(x), fitted sparsely or by least squares.

    degree, norm: the hyperbolic truncation; method: "least_angle" or "least_squares";
    distributions: chaospy distributions of the columns of X, one each; when left out the
    polynomials are orthonormal on the training columns (as if these were independent).

    After fit: basis_, coef_ (outputs, terms) or (terms,), expansion_, relative_error_ (outputs,).
    """

    def __init__(
        self,
        degree: int = 3,
        norm: float = 1.0,
        method: str = "least_angle",
        distributions: Any = None,
    ) -> None:
        self.degree = degree
        self.norm = norm
        self.method = method
        self.distributions = distributions

    def fit(self, X: Any, y: Any) -> Self:
        """X (n, variables), y (n,) or (n, outputs). ValueError on what cannot be fitted."""
        X, y = validate_data(
            self, X, y, multi_output=True, y_numeric=True, dtype=np.float64, ensure_min_samples=2
        )
        if self.method not in _FITTERS:
            raise ValueError(f"method {self.method!r}: there are {', '.join(_FITTERS)}")
        y = np.asarray(y, dtype=np.float64)
        try:
            self.basis_ = self._basis(X)
            fit: Fit = _FITTERS[self.method](self.basis_.evaluate(X), y.reshape(len(y), -1))
        except FitError as error:
            raise ValueError(str(error)) from error
        self.expansion_ = fit.expansion(self.basis_, y.shape[1:])
        self.coef_ = np.ascontiguousarray(np.moveaxis(self.expansion_.coefficients, 0, -1))
        self.relative_error_ = fit.relative_error
        return self

    def predict(self, X: Any) -> FloatArray:
        """Values at X (n, variables): (n,) or (n, outputs)."""
        check_is_fitted(self)
        X = validate_data(self, X, reset=False, dtype=np.float64)
        return self.expansion_.evaluate(X)

    def _basis(self, X: FloatArray) -> ProductBasis:
        if self.distributions is None:
            equal = np.full(X.shape[0], 1.0 / X.shape[0])
            families = [recurrence_of_points(column, equal, self.degree) for column in X.T]
        else:
            families = [recurrence_of(part, self.degree) for part in list(self.distributions)]
        indices = hyperbolic(X.shape[1], self.degree, self.norm)
        known = np.array([family.degree for family in families], dtype=np.int64)
        return ProductBasis(families, indices[np.all(indices <= known, axis=1)])
