"""The set a quantity, or several together, should stay in, and who is in it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from nipc.arrays import BoolArray, FloatArray
from nipc.errors import InputError


@dataclass(frozen=True)
class Box:
    """low <= quantity <= high for each of its columns of the quantities; infinite when open."""

    name: str
    columns: tuple[int, ...]
    low: tuple[float, ...]
    high: tuple[float, ...]

    def __post_init__(self) -> None:
        for low, high in zip(self.low, self.high, strict=True):
            if not low < high:
                raise InputError(f"box {self.name!r}: its low end {low:g} is not below {high:g}")
        if len(self.columns) != len(self.low) or not self.columns:
            raise InputError(f"box {self.name!r}: one pair of ends a quantity")

    @classmethod
    def single(cls, name: str, column: int, low: float, high: float) -> Box:
        """The box of one quantity."""
        return cls(name, (column,), (low,), (high,))

    @classmethod
    def joint(cls, name: str, boxes: Sequence[Box]) -> Box:
        """In all of these at once."""
        return cls(
            name,
            tuple(c for box in boxes for c in box.columns),
            tuple(e for box in boxes for e in box.low),
            tuple(e for box in boxes for e in box.high),
        )

    def narrowed(self, by: Sequence[float]) -> Box:
        """Each column's ends moved inwards by `by` (outwards where negative)."""
        low = tuple(e + b for e, b in zip(self.low, by, strict=True))
        high = tuple(e - b for e, b in zip(self.high, by, strict=True))
        return replace(self, low=low, high=high)

    def holds(self, values: FloatArray, margin: FloatArray | float = 0.0) -> BoolArray:
        """(..., Q) to (...): are all ends kept by at least `margin`, which broadcasts to (..., Q).

        NaN is not in a box.
        """
        margin = np.asarray(margin, float)
        inside: BoolArray = np.ones(values.shape[:-1], dtype=bool)
        for column, low, high in zip(self.columns, self.low, self.high, strict=True):
            value, slack = values[..., column], margin[..., column] if margin.ndim else margin
            inside &= (value >= low + slack) & (value <= high - slack)
        return inside

    def present(self, values: FloatArray) -> BoolArray:
        """(..., Q) to (...): are all of the box's quantities known?"""
        known = np.isfinite(values[..., self.columns[0]])
        for column in self.columns[1:]:
            known &= np.isfinite(values[..., column])
        return np.asarray(known)


@dataclass(frozen=True)
class Presence:
    """Of n members at T times: seen at all, and inside. Who has ended is seen, and outside."""

    seen: BoolArray
    inside: BoolArray


def presence(
    values: FloatArray,
    times: FloatArray,
    box: Box,
    ended: FloatArray | None = None,
    margin: FloatArray | float = 0.0,
) -> Presence:
    """Of members (n, T, Q); `ended` (n,) is when one ended physically, NaN when it did not."""
    seen, inside = box.present(values), box.holds(values, margin)
    if ended is not None and np.isfinite(ended).any():
        gone = times >= ended[:, None]
        return Presence(seen | gone, inside & ~gone)
    return Presence(seen, inside)


def inside_indicator(
    values: FloatArray, times: FloatArray, box: Box, ended: FloatArray | None = None
) -> FloatArray:
    """1 inside, 0 outside, NaN missing, (n, T): the quantity whose mean is P(inside)."""
    there = presence(values, times, box, ended)
    return np.where(there.seen, there.inside.astype(float), np.nan)


def survival_indicator(
    values: FloatArray, times: FloatArray, box: Box, ended: FloatArray | None = None
) -> FloatArray:
    """1 while never yet seen outside, 0 after, NaN once missing before it left, (n, T)."""
    there = presence(values, times, box, ended)
    left = np.maximum.accumulate(there.seen & ~there.inside, axis=1)
    lost = np.maximum.accumulate(~there.seen, axis=1)
    return np.where(left & ~_lost_first(left, lost), 0.0, np.where(lost, np.nan, 1.0))


def survived(
    values: FloatArray, times: FloatArray, box: Box, ended: FloatArray | None = None
) -> FloatArray:
    """`survival_indicator` at the last time, (n,)."""
    there = presence(values, times, box, ended)
    if there.seen.all():
        return np.asarray(there.inside.all(axis=1), float)
    return survival_indicator(values, times, box, ended)[:, -1]


def _lost_first(left: BoolArray, lost: BoolArray) -> BoolArray:
    """Whether each member went missing before it was seen to leave, (n, 1)."""
    horizon = left.shape[1]
    first_left = np.where(left[:, -1], left.argmax(axis=1), horizon)
    first_lost = np.where(lost[:, -1], lost.argmax(axis=1), horizon)
    return np.asarray(first_lost < first_left)[:, None]


def check_start(boxes: Sequence[Box], start: FloatArray) -> None:
    """Raise InputError when a box holds none of the start's members (n, Q)."""
    for box in boxes:
        if not box.holds(start).any():
            column = box.columns[0]
            raise InputError(
                f"box {box.name!r}: nothing is inside it at the start (its first quantity runs from"
                f" {np.nanmin(start[:, column]):g} to {np.nanmax(start[:, column]):g} there,"
                f" the box from {box.low[0]:g} to {box.high[0]:g})"
            )
