"""How many runs failed, why, and where in germ space."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from nipc.arrays import BoolArray, FloatArray

_SURE = 1e-3  # false-alarm probability of naming any direction at all


@dataclass(frozen=True)
class FailureGroup:
    """Runs that failed for one cause; `example` is one of their reasons in full."""

    kind: str
    count: int
    example: str


@dataclass(frozen=True)
class FailureRegion:
    """A germ coordinate along which failed runs lie apart from the good ones.

    `share` is the probability that a failed run lies beyond a good one in direction `side`.
    """

    name: str
    side: str
    share: float

    def __str__(self) -> str:
        return f"{self.side} {self.name} ({self.share:.0%} of pairs)"


@dataclass(frozen=True)
class FailureReport:
    """Failures of one batch."""

    total: int
    failed: int
    groups: tuple[FailureGroup, ...]
    regions: tuple[FailureRegion, ...]

    def __str__(self) -> str:
        if not self.failed:
            return f"none of {self.total} runs failed"
        causes = "; ".join(f"{g.count} x {g.kind}: {g.example}" for g in self.groups[:5])
        text = f"{self.failed} of {self.total} runs failed: {causes}"
        if self.regions:
            text += ". They lie at " + ", ".join(str(region) for region in self.regions[:3])
        return text


def causes(reasons: Iterable[str | None]) -> list[tuple[str, int]]:
    """Reasons and how often each came, the most frequent first; None is no failure.

    Reasons that differ in their numbers alone are one, told by the first of them.
    """
    counts: Counter[str] = Counter()
    examples: dict[str, str] = {}
    for reason in reasons:
        if reason is not None:
            cause = _without_numbers(reason)
            counts[cause] += 1
            examples.setdefault(cause, reason)
    return [(examples[cause], count) for cause, count in counts.most_common()]


def report(
    ok: BoolArray,
    kinds: Sequence[str | None],
    reasons: Sequence[str | None],
    germ: FloatArray,
    names: Sequence[str],
) -> FailureReport:
    """Count failures by cause (n,), and look for where they lie in the germ (n, K)."""
    counts: Counter[tuple[str, str]] = Counter()
    examples: dict[tuple[str, str], str] = {}
    for kind, reason in zip(kinds, reasons, strict=True):
        if reason is not None:
            cause = (kind or "failure", _without_numbers(reason))
            counts[cause] += 1
            examples.setdefault(cause, reason)
    groups = tuple(
        FailureGroup(cause[0], count, examples[cause]) for cause, count in counts.most_common()
    )
    failed = int(np.sum(~ok))
    return FailureReport(int(ok.size), failed, groups, _regions(ok, germ, names))


def _without_numbers(reason: str) -> str:
    """A reason with its numbers taken out, so that like causes are counted together."""
    return re.sub(r"[-+]?\d+(\.\d*)?([eEdD][-+]?\d+)?", "#", reason)


def _regions(ok: BoolArray, germ: FloatArray, names: Sequence[str]) -> tuple[FailureRegion, ...]:
    """Coordinates, and the distance from the centre, in which failed runs lie apart.

    Mann & Whitney (1947) rank test on each, at a level shared among them.
    """
    if ok.all() or not ok.any() or not germ.shape[1]:
        return ()
    from scipy.stats import mannwhitneyu  # slow to import, and seldom needed

    spread = germ.std(axis=0)
    used = spread > 0.0
    scaled = (germ[:, used] - germ[:, used].mean(axis=0)) / spread[used]
    columns = {name: scaled[:, k] for k, name in enumerate(np.array(names)[used])}
    columns["distance from the centre"] = np.sqrt(np.sum(scaled**2, axis=1))
    found = []
    for name, values in columns.items():
        test = mannwhitneyu(values[~ok], values[ok])
        share = float(test.statistic) / (np.sum(ok) * np.sum(~ok))
        if test.pvalue < _SURE / len(columns):
            side = "high" if share > 0.5 else "low"
            found.append(FailureRegion(name, side, max(share, 1.0 - share)))
    return tuple(sorted(found, key=lambda region: -region.share))
