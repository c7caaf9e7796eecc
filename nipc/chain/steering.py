"""What is done next with an arc: accept it, raise its degree, halve it; and how long the next is.

The tolerance is for the horizon. Errors of successive arcs add up like independent ones, so what is
left of its square is shared out evenly over what is left of the horizon: early arcs, where the
spread is small and the flow nearly linear, leave more to late ones.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from enum import Enum

from nipc.chain.ticks import TICKS
from nipc.problem.study import ChainSettings

USELESS = 0.5  # a held-out error of half the spread: the arc's polynomial says nothing
LEAST_LEFT = 0.1  # of the tolerance's square, whatever the arcs so far have used of it
NO_GAIN = 0.7  # a step that leaves more of the error than this was not worth its runs
EASY = 0.2  # of the tolerance: an arc this good may be longer
DEARER = (
    1.25  # a longer arc may have so many times the terms, and is kept at so many times the runs
)
CHEAPER = 0.85  # a shorter arc is kept when it takes no more than this of the runs
COSTLY = 3  # a degree from which a shorter arc is tried
BRIEF = TICKS // 4  # but none shorter than this: every run has its start to pay
LONGEST = 8  # cells
MANY_TERMS = 600  # beyond, a shorter arc is cheaper than a higher degree


class Step(Enum):
    """What comes next."""

    ACCEPT = "accept"
    RAISE = "raise"
    HALVE = "halve"
    STOP = "stop"


@dataclass(frozen=True)
class Tried:
    """A trial: degree, held-out error over the arc's tolerance, held-out error, terms.

    `far` is how many members of the ensemble would lie outside the design and want a direct run;
    `dearer` how many runs the next degree would add.
    """

    degree: int
    ratio: float
    error: float
    terms: int
    far: float = 0.0
    dearer: float = 0.0


@dataclass(frozen=True)
class Done:
    """An accepted arc: degree, error over the tolerance, the same at one degree less, ticks, runs.

    `dearer`: how many times the linear terms an arc of twice the length would have.
    """

    degree: int
    ratio: float
    lower: float
    length: int
    runs: int
    dearer: float


@dataclass(frozen=True)
class Steering:
    """Length (ticks) and degree with which the next arc is tried first."""

    settings: ChainSettings
    tolerance: float
    degree: int
    length: int = TICKS
    rested: bool = True
    known: tuple[tuple[int, int], ...] = ()  # (length, runs) of the last arcs of other lengths
    done: float = 0.0  # share of the horizon
    spent: float = 0.0  # sum of the squares of the errors so far

    @classmethod
    def of(cls, settings: ChainSettings, tolerance: float) -> Steering:
        asked = settings.state_degree
        return cls(settings, tolerance, asked if isinstance(asked, int) else 1)

    @property
    def adaptive(self) -> bool:
        """Whether arcs may be shortened and lengthened."""
        return self.settings.arcs == "auto"

    @property
    def fixed_degree(self) -> bool:
        return isinstance(self.settings.state_degree, int)

    def allowed(self, share: float) -> float:
        """Held-out error allowed to the next arc, which covers this share of the horizon."""
        if self.settings.arc_tolerance is not None:
            return self.settings.arc_tolerance
        left = max(self.tolerance**2 - self.spent, LEAST_LEFT * self.tolerance**2)
        return math.sqrt(left * min(1.0, share / max(1.0 - self.done, share)))

    def passed(self, share: float, error: float) -> Steering:
        """After an arc of this share and held-out error."""
        return replace(self, done=self.done + share, spent=self.spent + error**2)

    def span(self, at: int, end: int) -> int:
        """Last tick of an arc that starts at tick `at` and must not pass tick `end`."""
        length = self.length
        if length >= TICKS and at % TICKS == 0:
            return min(at + length // TICKS * TICKS, end)
        length = min(length, TICKS)
        while at % length or at + length > end:  # a part of a cell, where it can lie
            length //= 2
        return at + length

    def judge(self, tried: list[Tried], length: int, halved: list[Tried]) -> tuple[Step, str]:
        """What to do after the trials of an arc of this length; `halved` are longer arcs' best."""
        last, best = tried[-1], min(tried, key=lambda t: t.error)
        reason = self._no_higher(tried)
        if last.ratio <= 1.0:
            cheaper = self.settings.direct_share > 0.0 and last.far > last.dearer
            helps = len(tried) == 1 or last.far < NO_GAIN * tried[-2].far
            return (Step.RAISE if cheaper and helps and reason is None else Step.ACCEPT), ""
        if reason is None:
            return Step.RAISE, ""
        useless = not math.isfinite(best.error) or best.error > USELESS
        gains = not halved or best.ratio <= NO_GAIN * halved[-1].ratio or useless
        if self.adaptive and length > 1 and gains:
            return Step.HALVE, reason
        if useless:
            return Step.STOP, f"held-out runs of the arc miss by {best.error:.0%} of the spread"
        if self.adaptive and not gains:
            reason = "neither a higher degree nor a shorter arc brings more"
        return Step.ACCEPT, reason

    def _no_higher(self, tried: list[Tried]) -> str | None:
        """Why a higher degree is not tried, or None."""
        last = tried[-1]
        if self.fixed_degree:
            return "the degree is fixed by the study"
        if last.degree >= self.settings.largest_degree:
            return "the largest degree is not enough"
        if len(tried) > 1 and last.error > NO_GAIN * tried[-2].error:
            return "a higher degree brings nothing: the noise terms set the error"
        if self.adaptive and last.terms > MANY_TERMS:
            return "a higher degree has too many terms"
        return None

    def shorter(self, length: int) -> Steering:
        """After an arc of this length was too long: half of it, from the degree one lower."""
        half = length // 2 if length <= TICKS else length // TICKS // 2 * TICKS
        degree = self.degree if self.fixed_degree else max(1, self.degree - 1)
        return replace(self, length=half, degree=degree, rested=False)

    def after(self, done: Done) -> tuple[Steering, str]:
        """For the arc that follows an accepted one. One just halved is followed by its like."""
        easier = not self.fixed_degree and done.degree > 1 and done.lower <= 0.5
        known = dict(self.known) | {done.length: done.runs}
        following = replace(
            self, degree=done.degree - easier, length=done.length, rested=True,
            known=tuple(known.items()),
        )  # fmt: skip
        if not (self.adaptive and self.rested) or easier:
            return following, ""
        half, double = done.length // 2, 2 * done.length
        if half >= BRIEF and done.length % 2 == 0:
            if half not in known and done.degree >= COSTLY and not self.fixed_degree:
                words = f"next is half as long: degree {done.degree} is dear"
                return replace(following, length=half, degree=done.degree - 1), words
            if known.get(half, done.runs) <= CHEAPER * done.runs:
                return replace(
                    following, length=half
                ), "next is half as long, which took fewer runs"
        if done.length < LONGEST * TICKS:
            longer = done.length < TICKS or done.dearer <= DEARER
            if double not in known and done.ratio <= EASY and longer:
                return replace(following, length=double), "easy: next is twice as long"
            if known.get(double, math.inf) <= DEARER * done.runs:
                return replace(following, length=double), "next is twice as long, at similar cost"
        return following, ""
