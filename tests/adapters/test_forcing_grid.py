"""Tables of noise: their rows are the path's, and what straight lines between them lose."""

import numpy as np
import pytest

from nipc.adapters.forcing_grid import forcing_grid, grid_table, table_error
from nipc.problem.noise import Legendre, NoiseModel, Source


def model_of(terms, length=2.0, sources=1):
    names = tuple(f"push{j}" for j in range(sources))
    return NoiseModel(
        tuple(Source(n, "", 0.5) for n in names), (Legendre(terms),) * sources, 1.0, 1.0 + length
    )


def test_equal_steps_of_at_most_the_step():
    assert forcing_grid(1.0, 2.0, 0.3).tolist() == [1.0, 1.25, 1.5, 1.75, 2.0]
    assert forcing_grid(1.0, 2.0, 0.25).size == 5  # no row more for the rounding of a division
    assert forcing_grid(1.0, 2.0, 7.0).tolist() == [1.0, 2.0]
    with pytest.raises(ValueError, match="read-only"):
        forcing_grid(1.0, 2.0, 0.3)[0] = 0.0


def test_the_rows_are_the_path():
    model = model_of(5, sources=2)
    forcing = model.realise(np.random.default_rng(1).normal(size=(3, model.size)))
    grid = forcing_grid(1.0, 3.0, 0.1)
    np.testing.assert_allclose(grid_table(forcing, grid), forcing.table(grid), atol=1e-14)


def test_what_straight_lines_lose():
    """Two terms are straight; of three the parabola is off by h^2/12 of its slope's change.

    P_2 has slope 3 u: over each half of the arc the slope changes by 3, so that the trapezoids'
    error of sqrt(5 / L) P_2 is sqrt(5 / L) (L / 2) (2 h / L)^2 / 12 x 3. Its true integral over a
    half is 0; the constant has L / 4 as the square of its integral, the slope (L / 4) 3 / 4.
    """
    length, step = 2.0, 0.125
    assert table_error(model_of(2), 0.5) < 1e-14
    error = np.sqrt(5.0 / length) * 0.5 * length * (2.0 * step / length) ** 2 / 12.0 * 3.0
    expected = error**2 / (0.25 * length * (1.0 + 0.75))
    assert table_error(model_of(3), step) == pytest.approx(expected, rel=1e-9)
    assert table_error(model_of(3), None) == 0.0


def test_halving_the_step_mends_it():
    fine, coarse = (table_error(model_of(12), step) for step in (0.02, 0.16))
    assert coarse > 0.1
    assert fine < 1e-3
