"""Which noise source, start or parameter drives the spread: Sobol indices by pick-and-freeze.

With two independent ensembles A and B, and A_g which takes group g from B and the rest from A:
first share S_g = Var E(q | g) / Var q, total share T_g = E Var(q | all but g) / Var q.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from nipc.answers.batches import (
    batch_products,
    batch_sums,
    centre_of,
    jackknife_error,
    leave_one_out,
)
from nipc.answers.intervals import LEVEL, Interval, normal_factor
from nipc.arrays import BoolArray, FloatArray


@dataclass(frozen=True)
class DriverShares:
    """First and total shares (G, T, Q) with intervals; variance (T, Q).

    `undefined` (T, Q) marks where the quantity has no variance to share: there all is NaN.
    """

    groups: tuple[str, ...]
    first: FloatArray
    first_interval: Interval
    total: FloatArray
    total_interval: Interval
    variance: FloatArray
    undefined: BoolArray

    @property
    def interaction(self) -> FloatArray:
        """Share that no group has alone, 1 - sum of the first shares, (T, Q)."""
        return np.asarray(1.0 - self.first.sum(axis=0))


class PickFreezeAccumulator:
    """Shares from blocks of members, for any number of quantities and indicators at once.

    Total: Jansen 1999, E(q_A - q_Ag)^2 / 2 Var. First: of Saltelli et al. 2010,
    E q_B (q_Ag - q_A) / Var, sharp for weak groups, and Janon et al. 2014, the correlation of q_B
    and q_Ag, sharp for strong ones, that whose standard error is smaller at the place. Errors by
    the jackknife over `batches` of members. All products are of distances from the first block's
    mean. A member missing (NaN) in one of its runs is left out there.
    """

    def __init__(self, groups: Iterable[str], batches: int = 50) -> None:
        self.groups = tuple(groups)
        self.batches = batches
        self.members = 0
        self._centre: FloatArray | None = None
        self._sums: list[FloatArray] = []  # a group each: (10, B, T, Q)

    def update(self, a: FloatArray, b: FloatArray, mixed: Iterable[FloatArray]) -> None:
        """Add q_A and q_B (n, T, Q), and q_Ag for each group in order; a generator saves memory."""
        if self._centre is None:
            self._centre = centre_of(np.concatenate([a, b]))
            self._sums = [np.zeros((10, self.batches, *a.shape[1:])) for _ in self.groups]
        a, b = a - self._centre, b - self._centre
        own = np.isfinite(a) & np.isfinite(b)
        plain = self._pair_sums(a, b, np.ones((len(a), 1, 1))) if own.all() else None
        for sums, run in zip(self._sums, mixed, strict=True):
            run = run - self._centre
            present = own & np.isfinite(run)
            if plain is not None and present.all():
                sums[:5] += plain
                self._add_group(sums, a, b, run)
            else:
                kept = [np.where(present, q, 0.0) for q in (a, b, run)]
                sums[:5] += self._pair_sums(kept[0], kept[1], present.astype(float))
                self._add_group(sums, *kept)
        self.members += len(a)

    def _deal(self, values: FloatArray, by: FloatArray | None = None) -> FloatArray:
        if by is None:
            return batch_sums(values, self.batches, self.members)
        return batch_products(values, by, self.batches, self.members)

    def _pair_sums(self, a: FloatArray, b: FloatArray, present: FloatArray) -> FloatArray:
        count = np.broadcast_to(self._deal(present), (self.batches, *a.shape[1:]))
        return np.stack([count, self._deal(a), self._deal(b), self._deal(a, a), self._deal(b, b)])

    def _add_group(self, sums: FloatArray, a: FloatArray, b: FloatArray, run: FloatArray) -> None:
        step = run - a
        sums[5] += self._deal(step, step)
        sums[6] += self._deal(b, step)
        sums[7] += self._deal(run)
        sums[8] += self._deal(run, run)
        sums[9] += self._deal(b, run)

    def result(self, level: float = LEVEL) -> DriverShares:
        """The shares; intervals are asymptotically normal."""
        if self._centre is None:
            raise ValueError("no members have been added yet")
        z = normal_factor(level)
        shape = (len(self.groups), *self._centre.shape)
        first, total = np.full(shape, np.nan), np.full(shape, np.nan)
        first_error, total_error = np.full(shape, np.nan), np.full(shape, np.nan)
        for g, sums in enumerate(self._sums):
            whole = _estimates(sums.sum(axis=1))
            errors = jackknife_error(
                np.stack([_estimates(part) for part in leave_one_out(sums.swapaxes(0, 1))])
            )
            weak = errors[0] <= errors[1]
            first[g] = np.where(weak, whole[0], whole[1])
            first_error[g] = np.where(weak, errors[0], errors[1])
            total[g], total_error[g] = whole[2], errors[2]
        pairs = self._sums[0].sum(axis=1)
        variance = _variance(pairs)
        # below rounding of the values themselves there is no variance to share
        floor = (64.0 * np.finfo(float).eps * np.abs(self._centre)) ** 2
        undefined = ~(variance > floor)
        for shares in (first, total, first_error, total_error):
            shares[:, undefined] = np.nan
        return DriverShares(
            self.groups,
            first,
            Interval(first - z * first_error, first + z * first_error),
            total,
            Interval(total - z * total_error, total + z * total_error),
            np.where(undefined, 0.0, variance),
            undefined,
        )


def _variance(sums: FloatArray) -> FloatArray:
    n = np.where(sums[0] > 0, sums[0], np.nan)
    return np.asarray((sums[3] + sums[4]) / (2.0 * n) - ((sums[1] + sums[2]) / (2.0 * n)) ** 2)


def _estimates(sums: FloatArray) -> FloatArray:
    """(first after Saltelli, first after Janon, total after Jansen) of sums (10, T, Q)."""
    n = np.where(sums[0] > 0, sums[0], np.nan)
    _, b, _, b2, step2, b_step, run, run2, b_run = sums[1:] / n
    mean = 0.5 * (b + run)
    with np.errstate(invalid="ignore", divide="ignore"):
        variance = _variance(sums)
        janon = (b_run - mean**2) / (0.5 * (b2 + run2) - mean**2)
        return np.stack([b_step / variance, janon, 0.5 * step2 / variance])
