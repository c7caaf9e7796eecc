"""The diffusion law of each quantity, its fast oscillation averaged out, from blocks of members."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

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
    and where there is none the quantity is slow as it is; 0 is for one that is judged as it is.
    `used` (Q,) tells, after the first block, which period each was averaged over; `notes` why one
    of the user's could not be. Where it is the oscillation that spreads, its variance is averaged
    over the period and judged instead: `amplitude` (Q,) tells, after `laws`.
    """

    def __init__(
        self, times: FloatArray, periods: Sequence[float | None], batches: int = 100
    ) -> None:
        self.times = np.asarray(times, float)
        self.periods = tuple(periods)
        self.used: tuple[float | None, ...] = ()
        self.notes: list[str] = []
        self.refused: dict[int, str] = {}
        self.amplitude = [False for _ in periods]
        self._moments = [MomentAccumulator(batches) for _ in periods]
        self._whole = [MomentAccumulator(batches) for _ in periods]
        self._times = [self.times for _ in periods]

    def update(self, values: FloatArray) -> None:
        """Add a block of members, (n, T, Q)."""
        if not self.used:
            self.used = tuple(self._choose(q, values[..., q]) for q in range(len(self.periods)))
        for q, period in enumerate(self.used):
            own = values[..., q : q + 1]
            if period is not None:
                self._whole[q].update(own)
                own, self._times[q] = moving_average(own, self.times, period)
            self._moments[q].update(own)

    def _choose(self, q: int, values: FloatArray) -> float | None:
        period = self.periods[q]
        if period is None:
            period = common_period(values, self.times)
        if period is None or period == 0.0:
            return None
        try:
            moving_average(values[:1, :, None], self.times, period)
        except InputError as reason:
            if self.periods[q] is not None:
                self.notes.append(str(reason))
                self.refused[q] = str(reason)
            return None
        return period

    def std(self) -> FloatArray:
        """Square root of the variance that each law is of, at the output times (T, Q).

        After `laws`; NaN where no average reaches.
        """
        spread = np.full((self.times.size, len(self.periods)), np.nan)
        for q, (moments, own) in enumerate(zip(self._moments, self._times, strict=True)):
            variance = moments.variance[:, 0]
            if self.amplitude[q]:
                whole, period = self._whole[q].variance[None], self.used[q] or 0.0
                variance = moving_average(whole, self.times, period)[0][0, :, 0]
            spread[np.isin(self.times, own), q] = np.sqrt(np.maximum(variance, 0.0))
        return spread

    def laws(self, until: FloatArray | None = None, tolerance: float = 0.01) -> list[SpreadingLaw]:
        """The law of each quantity; only times up to `until` (Q,), its trust horizon, are used."""
        result = []
        for q, moments in enumerate(self._moments):
            times, period = self._times[q], self.used[q] or 0.0
            # an average reaches half a period ahead
            limit = np.inf if until is None else until[q] * (1.0 + 1e-12)
            kept = times + 0.5 * period <= limit
            if np.count_nonzero(kept) < 2:
                reason = "no more than one output time is trusted"
                result.append(SpreadingLaw("cannot tell", reason))
                continue
            variance = moments.batch_variance[:, kept, 0]
            # the mean of Brownian motion over a period P has the variance 2 D (t - P/6)
            origin = float(self.times[0]) + period / 6.0
            if period:
                whole = moving_average(self._whole[q].batch_variance, self.times, period)[0]
                whole = whole[:, kept, 0]
                self.amplitude[q] = _grows_beyond(whole, variance)
                if self.amplitude[q]:
                    variance, origin = whole, float(self.times[0])
            law = spreading_law(variance, times[kept], origin, tolerance)
            if not period and law.reason.startswith("no law follows"):
                hint = "; a quantity that oscillates is to be averaged over its period"
                law = replace(law, reason=law.reason + hint)
            result.append(law)
        return result

    def subjects(self, clock: str) -> list[str]:
        """What each law is of, for the sentence on it; empty for a quantity as it is."""
        said = []
        for q, period in enumerate(self.used):
            words = ""
            if period is not None:
                length = f"{period:.4g} {clock}".strip()
                words = f"averaged over its period of {length}"
                if self.amplitude[q]:
                    words = f"an oscillation of period {length}"
            elif q in self.refused:
                words = f"not averaged, for {self.refused[q]}"
            said.append(words)
        return said


def _grows_beyond(whole: FloatArray, slow: FloatArray) -> bool:
    """Whether a variance (B, T) surely grows, and by more than twice what its slow part does."""
    growth = whole[:, -1] - whole[:, 0]
    error = np.std(growth) / np.sqrt(growth.size)
    return bool(growth.mean() > max(2.0 * np.mean(slow[:, -1] - slow[:, 0]), 4.0 * error))


def common_period(values: FloatArray, times: FloatArray) -> float | None:
    """The period that most of the first members (n, T) show, or None."""
    found = [detect_period(path, times) for path in values[:LOOKED_AT]]
    known = [p for p in found if p is not None]
    if 2 * len(known) <= len(found):
        return None
    middle = float(np.median(known))
    agreeing = [p for p in known if abs(p - middle) <= 0.1 * middle]
    return middle if 2 * len(agreeing) > len(found) else None
