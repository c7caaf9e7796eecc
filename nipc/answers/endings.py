"""Which members end early for a physical reason (re-entry, a lost particle), and when.

    P(ended by t_k | member) = logistic(a_k + w . f_k),   k = 1 ... K

No polynomial can be fitted through runs that end, so the direct runs of the design tell by a
logistic regression: its features f_k are the germ and how far the expansions say each quantity has
gone, up and down, until t_k; its penalty is chosen on runs left out. A member's time of ending is
drawn by its own uniform number, so that shares are right even where the features tell little.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from nipc.answers.intervals import Interval, wilson
from nipc.arrays import FloatArray, IntArray
from nipc.chain.single_arc import SingleArc

LEVELS = 16  # times t_k at which the regression is made
FEWEST = 5  # runs that end, and that do not, below which all members are alike
FOLDS = 5
PENALTIES = np.logspace(-2.0, 2.0, 5)


@dataclass(frozen=True, eq=False)
class Endings:
    """The fitted regression; `runs` direct runs told it, `ended` of them by ending early.

    levels (K,) are the t_k, rows (K,) the last output times until then; `first` is the earliest
    ending seen. `model` is None where all members are alike: `shares` (K,) are then P(ended).
    """

    times: FloatArray
    levels: FloatArray
    rows: IntArray
    first: float
    runs: int
    ended: int
    shares: FloatArray
    middle: FloatArray
    centre: FloatArray
    scale: FloatArray
    model: Any

    def draw(self, nodes: FloatArray, values: FloatArray, uniform: FloatArray) -> FloatArray:
        """Time of ending (n,), NaN for none, of members by germ, quantities (n, T, Q), uniform."""
        count = nodes.shape[0]
        chance = np.tile(self.shares, (count, 1))
        if self.model is not None:
            for k in range(self.levels.size):
                rows = _features(nodes, values, self.rows[k], k, self.middle)
                chance[:, k] = self.model.predict_proba((rows - self.centre) / self.scale)[:, 1]
        chance = np.maximum.accumulate(chance, axis=1)
        # the inverse of the broken line from (first, 0) through (t_k, P_k)
        grid = np.concatenate([[self.first], self.levels])
        known = np.hstack([np.zeros((count, 1)), chance])
        step = np.argmax(known > uniform[:, None], axis=1)
        member = np.arange(count)
        low, high = known[member, np.maximum(step - 1, 0)], known[member, step]
        with np.errstate(invalid="ignore", divide="ignore"):
            part = np.clip((uniform - low) / (high - low), 0.0, 1.0)
        found = grid[np.maximum(step - 1, 0)] + part * (grid[step] - grid[np.maximum(step - 1, 0)])
        return np.where(step > 0, found, np.nan)

    def share(self, ended: FloatArray) -> tuple[FloatArray, Interval]:
        """P(ended by t) at the output times, from members' times of ending (n,), as runs know it.

        The interval is that of a share seen in the direct runs: the members add nothing to it.
        """
        shares = np.mean(self.times >= ended[:, None], axis=0)
        return shares, wilson(shares, np.full(shares.shape, float(self.runs)))

    @property
    def note(self) -> str:
        """What is to be said of it."""
        how = "by a logistic regression on these runs"
        if self.model is None:
            how = "by chance, there being too few to tell what makes them end"
        return (
            f"{self.ended} of {self.runs} runs of the design ended early for a physical reason."
            f" Which members of the ensemble do so is told {how}; they count as having left."
            " Means, spreads and drivers speak of motion that goes on."
        )


def endings_of(arc: SingleArc) -> Endings | None:
    """The endings that an arc's runs tell of; None when none ended."""
    made = arc.outcomes[:-1]
    ended, ok = np.concatenate([o.ended for o in made]), np.concatenate([o.ok for o in made])
    if not np.isfinite(ended[ok]).any():
        return None
    nodes, ended = arc.design.nodes[ok], ended[ok]
    seen = ended[np.isfinite(ended)]
    levels = np.unique(np.append(np.quantile(seen, np.linspace(0, 1, LEVELS)[1:]), arc.times[-1]))
    rows = np.maximum(np.searchsorted(arc.times, levels, side="right") - 1, 0).astype(np.int64)
    labels = ended[:, None] <= levels
    shares = labels.mean(axis=0)
    middle, centre, scale, model = np.zeros(0), np.zeros(0), np.ones(0), None
    if min(seen.size, ended.size - seen.size) >= FEWEST:
        values = arc.quantities(nodes)
        middle = np.append(np.nan_to_num(values).mean(axis=(0, 1)), levels.size)
        stacked = np.concatenate(
            [_features(nodes, values, row, k, middle) for k, row in enumerate(rows)]
        )
        centre, scale = stacked.mean(axis=0), stacked.std(axis=0)
        scale = np.where(scale > 0.0, scale, 1.0)
        model = _fitted((stacked - centre) / scale, labels.T.ravel(), labels.shape)
    return Endings(
        arc.times, levels, rows, float(seen.min()), ended.size, seen.size, shares, middle, centre,
        scale, model,
    )  # fmt: skip


def _features(
    nodes: FloatArray, values: FloatArray, row: int, level: int, middle: FloatArray
) -> FloatArray:
    """(n, features): germ, the quantities' extremes so far, how far from the middle, which level.

    A limit on either side is one on the distance from some middle: that of the runs, or near it.
    """
    so_far = np.nan_to_num(values[:, : row + 1])
    high, low = so_far.max(axis=1), so_far.min(axis=1)
    far = np.maximum(high - middle[:-1], middle[:-1] - low)
    which = np.zeros((nodes.shape[0], int(middle[-1])))
    which[:, level] = 1.0
    return np.hstack([nodes, high, low, far, far**2, which])


def _fitted(rows: FloatArray, labels: FloatArray, shape: tuple[int, int]) -> Any:
    """Logistic regression; a run's rows are left out together."""
    from sklearn.linear_model import LogisticRegression
    from sklearn.model_selection import GroupKFold, cross_val_score

    runs = np.tile(np.arange(shape[0]), shape[1])
    models = [LogisticRegression(C=c, max_iter=2000) for c in PENALTIES]
    folds = list(GroupKFold(FOLDS).split(rows, labels, runs))
    scores = [
        np.mean(cross_val_score(m, rows, labels, cv=folds, scoring="neg_log_loss")) for m in models
    ]
    return models[int(np.argmax(np.nan_to_num(scores, nan=-np.inf)))].fit(rows, labels)
