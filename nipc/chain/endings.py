"""Which members end within an arc for a physical reason (re-entry, a lost particle).

    P(ends in the arc | member) = logistic(a + w . f)

Runs that end give an arc's expansion nothing, but they tell where runs end: f are how far, up and
down, the expansion says each chart component goes within the arc, and the distance from the middle,
plain and squared. All arcs tell one regression, its penalty chosen on runs left out. That designs
prefer members at the rim does not matter to it, as it would to a share. A member's own uniform
number decides, so that shares are right even where the features tell little.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from nipc.arrays import BoolArray, FloatArray

FOLDS = 5  # with fewer endings the penalty is the middle one
PENALTIES = np.logspace(-2.0, 2.0, 5)


@dataclass(frozen=True, eq=False)
class Endings:
    """The fitted regression; `model` is None where every run ended."""

    middle: FloatArray
    centre: FloatArray
    scale: FloatArray
    model: Any

    def chance(self, start: FloatArray, values: FloatArray) -> FloatArray:
        """P(ended until each of the arc's times) (n, m), of how far members have gone until then.

        From chart values at an arc's start (n, d) and by its expansion (n, m, d).
        """
        shape = values.shape[:2]
        if self.model is None:
            return np.ones(shape)
        result = np.empty(shape)
        for k in range(shape[1]):
            rows = _features(start, values[:, : k + 1], self.middle)
            result[:, k] = self.model.predict_proba((rows - self.centre) / self.scale)[:, 1]
        return np.maximum.accumulate(result, axis=1)

    def times(
        self,
        start: FloatArray,
        values: FloatArray,
        times: FloatArray,
        uniform: FloatArray,
        first: bool,
    ) -> FloatArray:
        """When members end (n,), NaN for not here; times (m + 1,), the arc's start first.

        The inverse of the broken line through the chances, from none at the start, at `uniform`.
        What a start alone says comes evenly over the arc: who is there has not ended there. But on
        the `first` arc of all it comes at once.
        """
        known = np.hstack([np.zeros((start.shape[0], 1)), self.chance(start, values)])
        if not first:
            part = (times[1:] - times[0]) / (times[-1] - times[0])
            known[:, 1:] -= self.chance(start, start[:, None]) * (1.0 - part)
            known = np.maximum.accumulate(np.maximum(known, 0.0), axis=1)
        step = np.argmax(known > uniform[:, None], axis=1)
        before, member = np.maximum(step - 1, 0), np.arange(step.size)
        low, high = known[member, before], known[member, step]
        with np.errstate(invalid="ignore", divide="ignore"):
            part = np.clip((uniform - low) / (high - low), 0.0, 1.0)
        found = times[before] + part * (times[step] - times[before])
        return np.where(step > 0, found, np.nan)


class EndingsSeen:
    """Gathers the runs of all arcs so far, those that ended among them."""

    def __init__(self) -> None:
        self._parts: dict[tuple[int, int], tuple[FloatArray, FloatArray, BoolArray]] = {}

    @property
    def runs(self) -> int:
        return sum(int(ended.size) for _, _, ended in self._parts.values())

    @property
    def ended(self) -> int:
        return sum(int(ended.sum()) for _, _, ended in self._parts.values())

    def add(
        self, arc: tuple[int, int], start: FloatArray, values: FloatArray, ended: BoolArray
    ) -> None:
        """An arc's runs: (n, d), (n, m, d) by its expansion, and which ended (n,).

        `arc` is its first and last tick: one that is built anew takes the place of its earlier self
        so that no run counts twice.
        """
        # arcs may have other numbers of times: extremes are all that is used of them
        spans = np.stack([values.min(axis=1), values.max(axis=1)], axis=1)
        self._parts[arc] = (start, spans, ended)

    def fitted(self) -> Endings | None:
        """What all runs so far tell; None where none has ended."""
        if self.ended == 0:
            return None
        starts, spans, labels = map(np.concatenate, zip(*self._parts.values(), strict=True))
        middle = np.median(starts, axis=0)
        rows = _features(starts, spans, middle)
        centre, scale = rows.mean(axis=0), rows.std(axis=0)
        scale = np.where(scale > 0.0, scale, 1.0)
        model = None if labels.all() else _model((rows - centre) / scale, labels)
        return Endings(middle, centre, scale, model)


def _features(start: FloatArray, values: FloatArray, middle: FloatArray) -> FloatArray:
    high = np.maximum(start, values.max(axis=1))
    low = np.minimum(start, values.min(axis=1))
    far = np.maximum(high - middle, middle - low)
    return np.hstack([high, low, far, far**2])


def _model(rows: FloatArray, labels: BoolArray) -> Any:
    from sklearn.linear_model import LogisticRegression
    from sklearn.model_selection import StratifiedKFold, cross_val_score

    models = [LogisticRegression(C=c, max_iter=2000) for c in PENALTIES]
    if min(labels.sum(), (~labels).sum()) < FOLDS:
        return models[len(models) // 2].fit(rows, labels)
    folds = list(StratifiedKFold(FOLDS).split(rows, labels))
    scores = [
        np.mean(cross_val_score(m, rows, labels, cv=folds, scoring="neg_log_loss")) for m in models
    ]
    return models[int(np.argmax(np.nan_to_num(scores, nan=-np.inf)))].fit(rows, labels)
