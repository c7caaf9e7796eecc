"""Arcs as whole numbers: a cell of the horizon is 64 ticks, an arc begins and ends at one.

An arc is either a run of whole cells or a dyadic part of one cell (a half, a quarter, ...), so that
its noise follows from the cells' (see `history`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from nipc.arrays import FloatArray, IntArray

TICKS = 64
"""Ticks of a cell: the shortest arc is a 64th of it."""


@dataclass(frozen=True)
class Piece:
    """A cell (level 0), or its `index`-th part of length 2^-level."""

    cell: int
    level: int = 0
    index: int = 0

    @property
    def parent(self) -> Piece:
        """The part twice as long that holds this one."""
        return Piece(self.cell, self.level - 1, self.index // 2)


def pieces(first: int, last: int) -> list[Piece]:
    """The whole cells of an arc, or the one part of a cell that it is."""
    if first % TICKS == 0 and last % TICKS == 0:
        return [Piece(cell) for cell in range(first // TICKS, last // TICKS)]
    length = last - first
    if length <= 0 or TICKS % length or first % length or length >= TICKS:
        raise ValueError(f"ticks {first} to {last} are neither whole cells nor a part of one")
    level = (TICKS // length).bit_length() - 1
    return [Piece(first // TICKS, level, first % TICKS // length)]


def times(cells: FloatArray) -> FloatArray:
    """Times (C TICKS + 1,) of all ticks, from the edges (C + 1,) of the cells."""
    parts = np.arange(TICKS) / TICKS
    inner = cells[:-1, None] + np.diff(cells)[:, None] * parts
    return np.append(inner.ravel(), cells[-1])


def snapped(instants: FloatArray, ticks: FloatArray) -> FloatArray:
    """Instants, those within rounding of a tick moved onto it."""
    nearest: IntArray = np.clip(np.searchsorted(ticks, instants), 1, ticks.size - 1)
    nearest = nearest - (instants - ticks[nearest - 1] < ticks[nearest] - instants)
    close = np.abs(instants - ticks[nearest]) <= 1e-12 * (ticks[-1] - ticks[0])
    return np.where(close, ticks[nearest], instants)
