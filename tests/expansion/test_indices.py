"""Index sets against counts in closed form and brute force."""

from itertools import product
from math import comb

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nipc.errors import FitError, InputError
from nipc.expansion import explicit, hyperbolic, total_degree, weighted
from nipc.expansion.indices import nested_rows


@given(st.integers(1, 6), st.integers(0, 5))
def test_total_degree_has_the_binomial_count(d, degree):
    indices = total_degree(d, degree)
    assert indices.shape == (comb(d + degree, degree), d)
    assert np.all(np.diff(indices.sum(axis=1)) >= 0)
    assert not indices[0].any()
    assert len({tuple(row) for row in indices}) == len(indices)


@settings(deadline=None)
@given(
    st.integers(1, 4),
    st.integers(0, 5),
    st.sampled_from([0.3, 0.5, 0.75, 1.0]),
    st.integers(1, 4),
    st.data(),
)
def test_weighted_set_is_that_of_brute_force(d, degree, norm, interactions, data):
    weights = data.draw(st.lists(st.sampled_from([0.5, 1.0, 1.5, 2.0]), min_size=d, max_size=d))
    wanted = {
        index
        for index in product(range(2 * degree + 1), repeat=d)
        if sum((w * i) ** norm for w, i in zip(weights, index, strict=True))
        <= degree**norm * (1 + 1e-9)
        and sum(i > 0 for i in index) <= interactions
    }
    found = weighted(d, degree, weights, norm=norm, interactions=interactions)
    assert {tuple(int(i) for i in row) for row in found} == wanted
    assert len(found) == len(wanted)


def test_two_hundred_variables_at_norm_one_half_leave_no_products():
    # √1 + √1 = 2 > √2: only the constant and two degrees of each variable
    assert hyperbolic(200, 2, 0.5).shape == (401, 200)


def test_explicit_sets_are_graded_and_hold_the_constant():
    assert explicit([[2, 0], [0, 1], [0, 1]]).tolist() == [[0, 0], [0, 1], [2, 0]]
    with pytest.raises(InputError, match="whole numbers"):
        explicit([[0.5, 1.0]])


def test_nested_sets_are_found_in_the_larger_one():
    small, large = total_degree(3, 2), total_degree(3, 4)
    assert np.array_equal(large[nested_rows(small, large)], small)
    with pytest.raises(InputError, match="not contained"):
        nested_rows(large, small)


def test_a_set_beyond_memory_is_refused_with_its_number():
    count = comb(1105, 5)  # some 1e13
    with pytest.raises(FitError, match=f"{count:,} terms"):
        total_degree(1100, 5)


def test_a_hyperbolic_set_beyond_memory_is_refused_while_it_grows(monkeypatch):
    monkeypatch.setattr("nipc.expansion.memory.physical_memory", lambda: 10_000_000)
    with pytest.raises(FitError, match="more than"):
        hyperbolic(100, 6, 0.9)


@pytest.mark.parametrize("bad", [{"norm": 0.0}, {"norm": 1.5}, {"weights": [1.0]}])
def test_wrong_arguments_are_refused(bad):
    with pytest.raises(InputError):
        weighted(2, 3, **bad)
