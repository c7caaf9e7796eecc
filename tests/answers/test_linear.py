"""The linear part of outputs that know only what came before them."""

from __future__ import annotations

import numpy as np
import pytest

from nipc.answers.linear import LinearPart
from nipc.errors import InputError

N = 3000


@pytest.fixture(scope="module")
def germ():
    rng = np.random.default_rng(71)
    return np.hstack([np.ones((N, 1)), rng.standard_normal((N, 40)), np.zeros((N, 2))])


def test_coefficients_and_rest(germ):
    """q_0 = z_1 + 2 z_2 + 0.5 (z_1^2 - 1), of variance 5 + 0.5; q_1 adds 3 z_30."""
    first = germ[:, 1] + 2 * germ[:, 2] + 0.5 * (germ[:, 1] ** 2 - 1) + 100.0
    outputs = np.stack([first, first + 3 * germ[:, 30]], axis=1)[:, :, None]
    part = LinearPart.of(germ, np.array([11, 43]), outputs)
    np.testing.assert_allclose(part.share_beyond[:, 0], [0.5 / 5.5, 0.5 / 14.5], atol=0.02)
    found = part.coefficients(0, 0)
    np.testing.assert_allclose(found[1:3], [1.0, 2.0], atol=5 * np.sqrt(part.noise(0, 0)))
    assert np.all(found[11:] == 0.0)
    later = part.coefficients(1, 0)
    assert later[30] == pytest.approx(3.0, abs=5 * np.sqrt(part.noise(1, 0)))
    assert np.all(later[41:] == 0.0)
    # chi-square of 39 coefficients that are zero in truth: 5 deviations
    errors = np.delete(later[1:41], [0, 1, 29])
    assert np.mean(errors**2) == pytest.approx(part.noise(1, 0), rel=5 * np.sqrt(2 / 37))


def test_a_linear_output_has_nothing_beyond(germ):
    outputs = (germ[:, 1:41] @ np.linspace(1, 2, 40))[:, None, None]
    part = LinearPart.of(germ, np.array([43]), outputs)
    assert part.share_beyond[0, 0] < 1e-12
    np.testing.assert_allclose(part.coefficients(0, 0)[1:41], np.linspace(1, 2, 40), rtol=1e-9)


def test_no_variance_and_missing_members_are_unknown(germ):
    outputs = np.ones((N, 1, 2))
    outputs[5, 0, 1] = np.nan
    part = LinearPart.of(germ, np.array([43]), outputs)
    assert np.isnan(part.share_beyond).all()


def test_too_few_members(germ):
    with pytest.raises(InputError, match="cannot tell"):
        LinearPart.of(germ[:30], np.array([43]), np.zeros((30, 1, 1)))
