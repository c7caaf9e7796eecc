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
        """(n,) from chart values at an arc's start (n, d) and by its expansion (n, m, d)."""
        if self.model is None:
            return np.ones(start.shape[0])
        rows = (_features(start, values, self.middle) - self.centre) / self.scale
        return np.asarray(self.model.predict_proba(rows)[:, 1], float)


class EndingsSeen:
    """Gathers the runs of all arcs so far, those that ended among them."""

    def __init__(self) -> None:
        self._starts: list[FloatArray] = []
        self._values: list[FloatArray] = []
        self._ended: list[BoolArray] = []

    @property
    def runs(self) -> int:
        return int(sum(part.size for part in self._ended))

    @property
    def ended(self) -> int:
        return int(sum(part.sum() for part in self._ended))

    def add(self, start: FloatArray, values: FloatArray, ended: BoolArray) -> None:
        """An arc's runs: (n, d), (n, m, d) by its expansion, and which ended (n,)."""
        self._starts.append(start)
        # arcs may have other numbers of times: extremes are all that is used of them
        self._values.append(np.stack([values.min(axis=1), values.max(axis=1)], axis=1))
        self._ended.append(ended)

    def fitted(self) -> Endings | None:
        """What all runs so far tell; None where none has ended."""
        if self.ended == 0:
            return None
        labels = np.concatenate(self._ended)
        starts, spans = np.concatenate(self._starts), np.concatenate(self._values)
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
