"""Variance shares of groups of variables, as sums of squared coefficients (Sobol' 1993).

    Var f = Σ_{t>0} c_t²;   first: terms in the group alone;   total: terms in any of it

An output without variance has no shares: NaN, by definition and without a warning.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from nipc.arrays import BoolArray, FloatArray
from nipc.errors import InputError

Groups = Sequence[Sequence[int]]


def constant_outputs(coefficients: FloatArray) -> BoolArray:
    """Outputs whose coefficients (terms, …) beyond the constant are rounding of it."""
    rounding = 64.0 * np.finfo(np.float64).eps * np.abs(coefficients[0])
    return np.asarray(np.sum(coefficients[1:] ** 2, axis=0) <= rounding**2)


def first_shares(coefficients: FloatArray, depends: BoolArray, groups: Groups) -> FloatArray:
    """Share of each group acting alone: (groups, …). depends (terms, variables)."""
    inside, outside = _touched(depends, groups)
    return _share(coefficients, inside & ~outside)


def total_shares(coefficients: FloatArray, depends: BoolArray, groups: Groups) -> FloatArray:
    """Share of each group with all its interactions: (groups, …)."""
    inside, _ = _touched(depends, groups)
    return _share(coefficients, inside)


def shares_of_terms(coefficients: FloatArray, terms: BoolArray) -> FloatArray:
    """Share of each selection of terms, (selections, terms): (selections, …)."""
    return _share(coefficients, terms)


def _share(coefficients: FloatArray, selections: BoolArray) -> FloatArray:
    squares = coefficients.reshape(coefficients.shape[0], -1)[1:] ** 2
    parts = selections[:, 1:].astype(np.float64) @ squares
    variance = squares.sum(axis=0)
    undefined = constant_outputs(coefficients).reshape(-1)
    shares = parts / np.where(undefined, 1.0, variance)
    shares[:, undefined] = np.nan
    return shares.reshape(selections.shape[0], *coefficients.shape[1:])


def _touched(depends: BoolArray, groups: Groups) -> tuple[BoolArray, BoolArray]:
    """(groups, terms): whether a term depends on the group; whether on anything else."""
    n_variables = depends.shape[1]
    members = np.zeros((len(groups), n_variables), dtype=np.bool_)
    for row, group in zip(members, groups, strict=True):
        if any(not 0 <= v < n_variables for v in group):
            raise InputError(f"a group names variable {list(group)}; there are {n_variables}")
        row[list(group)] = True
    counts = depends.astype(np.float64)
    inside = members.astype(np.float64) @ counts.T > 0.0
    outside = (~members).astype(np.float64) @ counts.T > 0.0
    return inside, outside
