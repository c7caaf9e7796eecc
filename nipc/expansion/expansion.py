"""f(x) ≈ Σ_t c_t Ψ_t(x): a polynomial chaos expansion and what follows from its coefficients.

Moments and variance shares of an orthonormal expansion are sums of squares of its coefficients.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.arrays import BoolArray, FloatArray
from nipc.errors import InputError
from nipc.expansion.basis import BLOCK, Basis, blocks
from nipc.expansion.shares import (
    Groups,
    constant_outputs,
    first_shares,
    shares_of_terms,
    total_shares,
)


@dataclass(frozen=True)
class Expansion:
    """basis: the Ψ_t; coefficients (terms, …): any shape of outputs, in the outputs' units;
    error (…): root-mean-square leave-one-out error of each output, same unit, or None."""

    basis: Basis
    coefficients: FloatArray
    error: FloatArray | None = None

    def __post_init__(self) -> None:
        if self.coefficients.shape[:1] != (self.basis.n_terms,):
            raise InputError(
                f"coefficients of shape {self.coefficients.shape} do not go with "
                f"{self.basis.n_terms} terms"
            )

    @property
    def output_shape(self) -> tuple[int, ...]:
        return self.coefficients.shape[1:]

    @property
    def mean(self) -> FloatArray:
        """E f = c_0: (…)."""
        return np.asarray(self.coefficients[0])

    @property
    def variance(self) -> FloatArray:
        """Var f = Σ_{t>0} c_t²: (…)."""
        return np.asarray(np.sum(self.coefficients[1:] ** 2, axis=0))

    @property
    def std(self) -> FloatArray:
        return np.sqrt(self.variance)

    @property
    def constant(self) -> BoolArray:
        """Outputs without variance, whose shares are undefined: (…)."""
        return constant_outputs(self.coefficients)

    @property
    def relative_error(self) -> FloatArray:
        """Leave-one-out error over standard deviation: (…); zero for constant outputs."""
        if self.error is None:
            raise InputError("this expansion carries no error estimate")
        std, constant = self.std, self.constant
        return np.where(constant, 0.0, self.error / np.where(constant, 1.0, std))

    def evaluate(self, nodes: FloatArray, block: int = BLOCK) -> FloatArray:
        """f at nodes (n, variables): (n, …)."""
        nodes = self.basis.checked(nodes)
        flat = np.ascontiguousarray(self.coefficients.reshape(self.basis.n_terms, -1).T)
        out = np.empty((nodes.shape[0], flat.shape[0]))
        work = np.empty((self.basis.n_terms, min(block, nodes.shape[0])))
        for rows in blocks(nodes.shape[0], block):
            part = work[:, : rows.stop - rows.start]
            self.basis.fill(nodes[rows], part)
            out[rows] = (flat @ part).T
        return out.reshape(nodes.shape[0], *self.output_shape)

    def gradient(self, nodes: FloatArray) -> FloatArray:
        """∂f/∂x_v at nodes (n, variables): (n, variables, …)."""
        nodes = self.basis.checked(nodes)
        flat = self.coefficients.reshape(self.basis.n_terms, -1)
        n_variables = self.basis.n_variables
        out = np.empty((nodes.shape[0], n_variables, flat.shape[1]))
        size = max(1, BLOCK // max(1, n_variables))
        for rows in blocks(nodes.shape[0], size):
            slopes = self.basis.gradient_block(nodes[rows])
            out[rows] = np.matmul(slopes.transpose(2, 0, 1), flat)
        return out.reshape(nodes.shape[0], n_variables, *self.output_shape)

    def first(self, groups: Groups | None = None) -> FloatArray:
        """First-order Sobol' indices of groups of variables (by default each): (groups, …)."""
        return first_shares(self.coefficients, self.basis.depends, self._groups(groups))

    def total(self, groups: Groups | None = None) -> FloatArray:
        """Total Sobol' indices of groups of variables: (groups, …)."""
        return total_shares(self.coefficients, self.basis.depends, self._groups(groups))

    def degree_shares(self) -> FloatArray:
        """Share of the variance in the terms of each total degree: (highest degree + 1, …)."""
        degrees = self.basis.degrees
        selections = degrees == np.arange(int(degrees.max(initial=0)) + 1)[:, None]
        return shares_of_terms(self.coefficients, selections)

    def nonlinear_share(self) -> FloatArray:
        """Share of the variance beyond degree one: (…)."""
        beyond = self.basis.degrees > 1
        return np.asarray(shares_of_terms(self.coefficients, beyond[None])[0])

    def _groups(self, groups: Groups | None) -> Groups:
        return groups if groups is not None else [[v] for v in range(self.basis.n_variables)]
