"""An expansion with its variables scaled about their means: exact, whatever the families."""

from __future__ import annotations

import chaospy
import numpy as np
import pytest

from nipc.answers.scaled_expansion import connection, scaled_expansion
from nipc.expansion import Expansion, ProductBasis, total_degree
from nipc.expansion.recurrence import hermite, recurrence_of

LAWS = (
    chaospy.Normal(0.0, 1.0),
    chaospy.Uniform(2.0, 5.0),
    chaospy.LogNormal(0.1, 0.3),
    chaospy.Beta(2.0, 3.0, -1.0, 4.0),
)


def test_hermite_in_closed_form():
    """He_2(s z) = s^2 He_2(z) + s^2 - 1, He_3(s z) = s^3 He_3(z) + 3 s (s^2 - 1) z."""
    s = 0.6
    found = connection(hermite(3), s, 3)
    assert found[2] == pytest.approx([(s**2 - 1) / np.sqrt(2), 0.0, s**2, 0.0], abs=1e-14)
    assert found[3] == pytest.approx([0.0, 3 * s * (s**2 - 1) / np.sqrt(6), 0.0, s**3], abs=1e-14)


@pytest.mark.parametrize("scales", [(0.5, 1.0, 2.0, 0.0), (1.0, -1.0, 0.3, 1.7)])
def test_values_are_those_at_the_scaled_nodes(scales):
    rng = np.random.default_rng(3)
    basis = ProductBasis.from_distributions(LAWS, total_degree(4, 4))
    expansion = Expansion(basis, rng.standard_normal((basis.n_terms, 2, 3)))
    nodes = np.stack([np.ravel(law.inv(rng.random(50))) for law in LAWS], axis=1)
    means = np.array([recurrence_of(law, 1).shift for law in LAWS])
    moved = means + np.array(scales) * (nodes - means)
    found = scaled_expansion(expansion, np.array(scales)).evaluate(nodes)
    expected = expansion.evaluate(moved)
    assert found == pytest.approx(expected, abs=1e-9 * np.abs(expected).max())


def test_sets_that_lack_lower_terms_are_completed():
    """x^2 y alone of its family: scaling x brings in y."""
    basis = ProductBasis([hermite(2)] * 2, np.array([[0, 0], [2, 1]]))
    found = scaled_expansion(Expansion(basis, np.array([0.0, 1.0])), np.array([0.0, 1.0]))
    # He_2(0) / sqrt 2 = -1 / sqrt 2, times y
    assert found.std == pytest.approx(1 / np.sqrt(2))
    assert found.total([[0], [1]]) == pytest.approx([0.0, 1.0])
