"""Orders of a member's value in the strength of the noise."""

from __future__ import annotations

import numpy as np
import pytest

from nipc.answers import present
from nipc.answers.orders import Orders, solved


def test_polynomials_are_told_apart_under_a_large_constant():
    """1e6 + 2 z s + 3 z^2 s^2: to rounding of the parts, not of the constant's square."""
    z = np.random.default_rng(2).standard_normal(500)
    nodes = np.cos(np.pi * (np.arange(5) + 0.5) / 5)
    values = np.stack([1e6 + 2 * z * s + 3 * z**2 * s**2 for s in nodes])
    found = solved(nodes, values)
    for order, part in enumerate((1e6 + 0 * z, 2 * z, 3 * z**2, 0 * z, 0 * z)):
        assert found[order] == pytest.approx(part, abs=1e-8)


def test_what_a_linear_picture_leaves_out():
    """q = a z s + b z^2 s^2: RMS of the second part sqrt 3 b s^2, variance a^2 s^2 + 2 b^2 s^4."""
    z = np.random.default_rng(5).standard_normal(400_000)
    parts = np.stack([0 * z, 0.7 * z, 0.2 * z**2])[:, :, None, None]
    orders = Orders(parts)
    for s in (0.5, 1.0, 2.0):
        expected = np.sqrt(3) * 0.2 * s**2 / np.sqrt((0.7 * s) ** 2 + 2 * (0.2 * s**2) ** 2)
        assert orders.beyond_linear(s)[0, 0] == pytest.approx(expected, rel=0.02)
    assert orders.mean(2)[0, 0] == pytest.approx(0.2, rel=0.02)
    assert orders.std(1)[0, 0] == pytest.approx(0.7, rel=0.02)


def test_without_spread_nothing_is_said():
    assert np.isnan(Orders(np.full((3, 10, 1, 1), 2.0)).beyond_linear()).all()


def test_members_that_are_not_there_are_left_out():
    """Of 1, 3 and a missing one: mean 2, spread 1, size sqrt 5; where none is there, NaN."""
    values = np.array([[1.0, np.nan], [3.0, np.nan], [np.nan, np.nan]])
    for found, expected in (
        (present.mean(values), 2.0),
        (present.std(values), 1.0),
        (present.size(values), np.sqrt(5.0)),
    ):
        assert found[0] == pytest.approx(expected)
        assert np.isnan(found[1])
    assert present.largest(-values).tolist() == [3.0, 0.0]
