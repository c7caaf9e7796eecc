"""The diffusion law of each quantity, its fast oscillation averaged out, from blocks of members."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from nipc.answers.averaging import detect_period, moving_average
from nipc.answers.diffusion import SpreadingLaw, spreading_law
from nipc.answers.moments import MomentAccumulator
from nipc.arrays import FloatArray
from nipc.errors import InputError

LOOKED_AT = 9


class SlowSpreading:
    """Averages each quantity over its period and gathers the variances of what is left.

    `periods` (Q,) are the user's; None is for the quantity's own, looked for in the first members,
    and where there is none the quantity is slow as it is. `used` (Q,) tells, after the first block,
    which period each was averaged over; `notes` why one of the user's could not be.
    """

    def __init__(
        self, times: FloatArray, periods: Sequence[float | None], batches: int = 100
    ) -> None:
        self.times = np.asarray(times, float)
        self.periods = tuple(periods)
        self.used: tuple[float | None, ...] = ()
        self.notes: list[str] = []
        self._moments = [MomentAccumulator(batches) for _ in periods]
        self._times = [self.times for _ in periods]

    def update(self, values: FloatArray) -> None:
        """Add a block of members, (n, T, Q)."""
        if not self.used:
            self.used = tuple(self._choose(q, values[..., q]) for q in range(len(self.periods)))
        for q, period in enumerate(self.used):
            own = values[..., q : q + 1]
            if period is not None:
                own, self._times[q] = moving_average(own, self.times, period)
            self._moments[q].update(own)

    def _choose(self, q: int, values: FloatArray) -> float | None:
        period = self.periods[q]
        if period is None:
            period = common_period(values, self.times)
        if period is None:
            return None
        try:
            moving_average(values[:1, :, None], self.times, period)
        except InputError as reason:
            if self.periods[q] is not None:
                self.notes.append(str(reason))
            return None
        return period

    def laws(self, until: FloatArray | None = None, tolerance: float = 0.01) -> list[SpreadingLaw]:
        """The law of each quantity; only times up to `until` (Q,), its trust horizon, are used."""
        result = []
        for q, moments in enumerate(self._moments):
            times = self._times[q]
            # an average reaches half a period ahead
            ahead = 0.5 * (self.used[q] or 0.0)
            kept = times + ahead <= (np.inf if until is None else until[q] * (1.0 + 1e-12))
            variance = moments.batch_variance[:, kept, 0]
            if np.count_nonzero(kept) < 2:
                reason = "no more than one output time is trusted"
                result.append(SpreadingLaw("cannot tell", reason))
            else:
                # the mean of Brownian motion over a period P has the variance 2 D (t - P/6)
                origin = float(self.times[0]) + (self.used[q] or 0.0) / 6.0
                result.append(spreading_law(variance, times[kept], origin, tolerance))
        return result


def common_period(values: FloatArray, times: FloatArray) -> float | None:
    """The period that most of the first members (n, T) show, or None."""
    found = [detect_period(path, times) for path in values[:LOOKED_AT]]
    known = [p for p in found if p is not None]
    if 2 * len(known) <= len(found):
        return None
    middle = float(np.median(known))
    agreeing = [p for p in known if abs(p - middle) <= 0.1 * middle]
    return middle if 2 * len(agreeing) > len(found) else None
