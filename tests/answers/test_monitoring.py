"""Rough or smooth, and the box that makes up for looking now and then."""

from __future__ import annotations

import numpy as np
import pytest

from nipc.answers.boxes import Box
from nipc.answers.monitoring import SHIFT, continuous_box, roughness


def test_the_constant():
    # zeta(1/2) from (1 - 2^(1/2)) zeta(1/2) = eta(1/2), summed by Euler's transformation
    terms = (-1.0) ** np.arange(60) / np.sqrt(np.arange(1, 61))
    for _ in range(40):
        terms = terms.cumsum() if _ == 0 else 0.5 * (terms[1:] + terms[:-1])
    value = terms[-1] / (1 - np.sqrt(2.0))
    assert -value / np.sqrt(2 * np.pi) == pytest.approx(SHIFT, abs=1e-10)


def test_brownian_smooth_and_integrated():
    rng = np.random.default_rng(1)
    times = np.linspace(0.0, 2.0, 201)
    noise = rng.standard_normal((4000, 200)) * np.sqrt(0.01)
    walk = np.concatenate([np.zeros((4000, 1)), noise.cumsum(axis=1)], axis=1)
    smooth = 5 * times + rng.standard_normal((4000, 1)) * np.sin(times)
    found = roughness(np.stack([3.0 * walk, smooth, 7.0 * times + walk], axis=2), times)
    np.testing.assert_allclose(found.exponent, [0.5, 1.0, 0.5], atol=0.01)
    assert found.rough.tolist() == [True, False, True]
    np.testing.assert_allclose(found.rate[[0, 2]], [3.0, 1.0], rtol=0.01)


def test_the_box_is_narrowed_by_column():
    box = Box("both", (0, 2), (-1.0, -np.inf), (1.0, 5.0))
    moved = continuous_box(box, np.array([1.0, 50.0, 2.0]), 0.01)
    assert moved.low == (-1.0 + SHIFT * 0.1, -np.inf)
    assert moved.high == (1.0 - SHIFT * 0.1, 5.0 - SHIFT * 0.2)
