"""Noise histories by cells: any cutting into arcs sees the same Brownian paths."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest

from nipc.chain.history import BLOCK, NoiseHistory
from nipc.chain.ticks import TICKS, Piece, pieces, snapped, times
from nipc.problem.noise import BASES, Legendre, Source

WHITE, COLOURED = Source("w", "", 1.0), Source("g", "", 2.0, "gauss-markov", 0.5)


def history(cell_terms: int = 8) -> NoiseHistory:
    edges = np.array([0.0, 1.0, 2.5, 3.0, 4.0])
    return NoiseHistory(5, ("a", "a"), (WHITE, COLOURED), edges, cell_terms, np.ones(2))


def test_increments_over_an_arc_are_the_sums_of_its_cells():
    paths = history()
    arc = paths.white(0, Legendre(6), 0, 4 * TICKS, 0, 100)
    widths = np.diff(paths.edges)
    cells = sum(np.sqrt(w) * paths.cell(0, k, 0, 100, 8)[0] for k, w in enumerate(widths))
    assert 2.0 * arc[:, 0] == pytest.approx(cells, abs=1e-12)


@pytest.mark.parametrize("name", sorted(BASES))
def test_coefficients_are_standard_and_independent(name):
    """4,096 members: a covariance entry has standard error 1/64 (variance 1/45): 4.5 of them."""
    drawn = history().white(0, BASES[name](5), 0, 4 * TICKS, 0, BLOCK)
    assert np.cov(drawn.T) == pytest.approx(np.eye(5), abs=0.1)


def test_members_and_rows_do_not_depend_on_how_many_are_asked_for():
    paths = history()
    few = paths.white(0, Legendre(3), TICKS, 2 * TICKS, 7, 10)
    assert np.array_equal(few, paths.white(0, Legendre(6), TICKS, 2 * TICKS, 7, 50)[:10, :3])


def test_streams_and_scales():
    paths = history()
    other = paths.with_stream(1, "b")
    assert np.array_equal(paths.cell(0, 0, 0, 9, 3), other.cell(0, 0, 0, 9, 3))
    assert not np.allclose(paths.cell(1, 0, 0, 9, 3), other.cell(1, 0, 0, 9, 3))
    half = paths.scaled(np.array([0.5, 1.0]))
    arc = Legendre(4)
    scaled, plain = (h.white(0, arc, 0, 3 * TICKS, 0, 9) for h in (half, paths))
    assert scaled == pytest.approx(0.5 * plain)


def test_carried_values_keep_their_law():
    """Stationary, with correlation exp(-h/tau) across each cell; 4.5 standard errors of 1/45."""
    paths = history(cell_terms=2)
    now = paths.initial(1, 0, BLOCK)
    for cell, width in enumerate(np.diff(paths.edges)):
        after = paths.carry(1, now, cell * TICKS, (cell + 1) * TICKS, 0)
        assert np.var(after) == pytest.approx(1.0, abs=0.1)
        assert np.mean(now * after) == pytest.approx(np.exp(-width / 0.5), abs=0.075)
        now = after
    # the kernel times the noise: within one cell the end value is what its coefficients say
    rich = history(cell_terms=30)
    start = np.zeros(50)
    gains = np.sqrt(2 / 0.5) * np.array(
        [
            np.trapezoid(np.exp(-(1 - t) / 0.5) * f, t)
            for t in [np.linspace(0, 1, 20_001)]
            for f in Legendre(30).values(t)
        ]
    )
    drawn = rich.cell(1, 0, 0, 50, 30)
    assert rich.carry(1, start, 0, TICKS, 0) == pytest.approx(gains @ drawn, abs=1e-4)


def test_parts_of_a_cell_are_its_own_noise():
    """Halves and quarters are standard and independent, and projected back they are the cell's."""
    paths = history(cell_terms=4)
    cell = paths.cell(0, 1, 0, BLOCK, 4)
    quarter = TICKS // 4
    starts = [TICKS + k * quarter for k in range(4)]
    parts = [paths.white(0, Legendre(4), a, a + quarter, 0, BLOCK) for a in starts]
    # sampling error of a covariance of 4,096 pairs is 1/64: 5 of them for 136 entries
    assert np.cov(np.hstack(parts).T) == pytest.approx(np.eye(16), abs=0.08)
    nodes, weights = np.polynomial.legendre.leggauss(12)
    u, w = 0.5 * (nodes + 1), 0.5 * weights
    back = np.zeros((4, BLOCK))
    for k, part in enumerate(parts):
        # z_j of the cell = sum over the quarters of <phi_j, psi_k> z_k
        inner = (Legendre(4).values((k + u) / 4) * w) @ Legendre(4).values(u).T / 2.0
        back += inner @ part.T
    assert back == pytest.approx(cell, abs=1e-10)


def test_increments_inside_a_cell_add_up():
    """W over a cell is the sum over any dyadic cutting of it."""
    paths = history(cell_terms=3)
    whole = paths.white(0, Legendre(1), 0, TICKS, 0, 7)[:, 0]
    cuts = [0, 32, 48, 56, 64]
    parts = [
        np.sqrt((b - a) / TICKS) * paths.white(0, Legendre(2), a, b, 0, 7)[:, 0]
        for a, b in pairwise(cuts)
    ]
    assert sum(parts) == pytest.approx(whole, abs=1e-12)


def test_carried_values_keep_their_law_in_parts_of_a_cell():
    """Stationary variance 1 after two halves; 4.5 standard errors of 1/45."""
    paths = history(cell_terms=2)
    now = paths.initial(1, 0, BLOCK)
    for a in (0, TICKS // 2):
        after = paths.carry(1, now, a, a + TICKS // 2, 0)
        assert np.var(after) == pytest.approx(1.0, abs=0.1)
        assert np.mean(now * after) == pytest.approx(np.exp(-0.5 / 0.5), abs=0.075)
        now = after


def test_ticks():
    assert pieces(0, 2 * TICKS) == [Piece(0), Piece(1)]
    assert pieces(TICKS + 16, TICKS + 32) == [Piece(1, 2, 1)]
    with pytest.raises(ValueError, match="neither whole cells nor a part"):
        pieces(16, 48)
    edges = np.linspace(0.0, 28.0, 57)
    assert np.array_equal(times(edges)[::TICKS], edges)
    moved = snapped(edges[1:] * (1 + 1e-15) + np.array([0.1] + [0.0] * 55), times(edges))
    assert np.array_equal(moved[1:], edges[2:])
    assert moved[0] == edges[1] * (1 + 1e-15) + 0.1
