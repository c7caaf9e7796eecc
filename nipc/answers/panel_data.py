"""The data of the page's what-if panel: member value = sum over terms of prod_j s_j^p_tj c_t.

Terms are all powers of the drivers' scales of total order two or less. Each member is taken at a
small design of scales, ones and zeros, twos and negative ones among them (s and -s have the same
law), and its terms are fitted to it by least squares, in which the study as it stands counts most;
scales held back from the fit tell how far the panel is off, and how far a scale may be moved.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations

import numpy as np

from nipc.answers import present
from nipc.answers.scaled import Scaled
from nipc.answers.table import ResultTable
from nipc.arrays import FloatArray, IntArray

NUMBERS = 550_000
"""Numbers of all contributions: some 1.1 MB in the page, 4.4 MB in results.nc."""
FEWEST, MOST = 150, 600  # members
FEWEST_TIMES, TIMES = 12, 33
REACHES = (2.0, 1.5, 1.25)
HELD = 0.05  # of the spread: a scale up to which held-back members are off by more is not offered
FAR = 0.05  # nor one at which more of them pass outside what runs cover
AS_IT_STANDS = 30.0  # weight of the members at scale one
ROOM = 2.0  # where an arc's bounds stop a member, that is no response of the motion


def powers_of(count: int) -> IntArray:
    """(terms, count) powers of total order two or less: the constant, s_j, s_j^2, s_i s_j."""
    unit = np.eye(count, dtype=np.int64)
    pairs = [unit[i] + unit[j] for i, j in combinations(range(count), 2)]
    rows = [np.zeros(count, dtype=np.int64), *unit, *(2 * unit), *pairs]
    return np.array(rows).reshape(-1, count)


def design_of(kinds: Sequence[str]) -> FloatArray:
    """(points, count) scales; the first is the study as it stands.

    A parameter mirrored about its mean may leave what it can be: it is halved instead.
    """
    count = len(kinds)
    unit = np.eye(count)
    mirrored = np.where(np.array(kinds) == "parameter", 0.5, -1.0)
    pairs = [unit[i] + unit[j] for i, j in combinations(range(count), 2)]
    ones = np.ones(count)
    rest = [ones - row for row in unit] + [ones + 0.5 * row for row in unit]
    return np.array([ones, np.zeros(count), *unit, *(mirrored * unit), *pairs, *rest, mirrored])


def held_back(count: int) -> FloatArray:
    """(points, count) scales that test the fit, none of them in the design."""
    halves = np.full((2, count), 1.0)
    halves[0], halves[1] = 0.5, 0.75
    return np.vstack([halves, np.ones((count, count)) - 0.5 * np.eye(count)])


def add_panel(table: ResultTable, scaled: Scaled) -> None:
    """panel_contribution, panel_power, panel_scale_low and _high, panel_error; `panel_time`.

    Nothing where the arcs reached no output time.
    """
    count = len(scaled.groups)
    powers = powers_of(count)
    rows, members = _size(scaled, len(powers))
    before, scaled.room, scaled.holding = scaled.room, ROOM, False
    try:
        points = design_of([group.kind for group in scaled.groups])
        values = _members(scaled, points, members, rows)
        reached = np.isfinite(values).any(axis=(0, 1, 3))
        if reached.sum() < 2:
            return
        rows, values = rows[reached], values[:, :, reached]
        terms = _fitted(points, powers, values)
        tested, error, high = _tested(scaled, terms, powers, members, rows)
    finally:
        scaled.room, scaled.holding = before, True
    dims = ("panel_term", "panel_member", "quantity", "panel_time")
    contributions = terms.transpose(0, 1, 3, 2)
    words = "contribution of each power of the scales to a member"
    table.add("panel_contribution", dims, contributions, "as the quantity", words)
    table.add("panel_power", ("panel_term", "source"), powers, "1", "powers of the scales")
    unit = table.study.clock.unit
    words = "time, at one phase of the period" if _in_phase(scaled, rows) else "time"
    table.add("panel_time", ("panel_time",), scaled.times[rows], unit, words)
    table.add("panel_scale_low", ("source",), np.zeros(count), "1", "smallest scale offered")
    table.add("panel_scale_high", ("source",), high, "1", "largest scale offered")
    table.add(
        "panel_tested", ("panel_test", "source"), tested, "1", "scales held back from the fit"
    )
    words = "root-mean-square error of members at scales held back, over their spread"
    table.add("panel_error", ("panel_test", "quantity"), error, "1", words)


def _size(scaled: Scaled, terms: int) -> tuple[IntArray, int]:
    """Which output times and how many members keep the panel small."""
    times, period = scaled.times, scaled.study.clock.period
    each = terms * len(scaled.study.quantity)
    rows = rows_of(times, period, max(2, min(TIMES, NUMBERS // (FEWEST * each))))
    members = int(np.clip(NUMBERS // (each * rows.size), FEWEST, MOST))
    return rows, min(members, scaled.study.ensemble.members)


def rows_of(times: FloatArray, period: float | None, most: int) -> IntArray:
    """At most so many of the times, the first and the last among them.

    At one phase of the period where that can be: an oscillation seen at other phases each time
    would be drawn as a slow one that is not there.
    """
    count = times.size
    if count <= most:
        return np.arange(count)
    if period is not None:
        beat = period * (count - 1) / (times[-1] - times[0])  # output steps in a period
        whole = round(beat)
        even = np.allclose(np.diff(times), np.diff(times)[0], rtol=1e-6)
        if even and whole >= 1 and abs(beat - whole) <= 0.02 * whole:
            stride = whole * -(-(count - 1) // ((most - 1) * whole))
            rows = np.union1d([0], np.arange(count - 1, -1, -stride))
            if FEWEST_TIMES <= rows.size <= most:
                return rows
    return np.unique(np.linspace(0, count - 1, most).round().astype(int))


def _in_phase(scaled: Scaled, rows: IntArray) -> bool:
    """Whether times that were left out may hide an oscillation between those that were not."""
    period = scaled.study.clock.period
    if period is None or rows.size < 3:
        return False
    beats = np.diff(scaled.times[rows])[1:] / period
    return bool(np.all(np.abs(beats - np.round(beats)) < 0.03 * beats) and np.all(beats > 0.9))


def _members(scaled: Scaled, points: FloatArray, members: int, rows: IntArray) -> FloatArray:
    """(points, n, times, Q)."""
    return np.stack([scaled.members(scales, 0, members)[:, rows] for scales in points])


def _fitted(points: FloatArray, powers: IntArray, values: FloatArray) -> FloatArray:
    """Terms (terms, n, times, Q) of members (points, n, times, Q), from differences to the first,
    so that a large constant costs no digits."""
    matrix = _monomials(points, powers)
    weights = np.ones(len(points))
    weights[0] = AS_IT_STANDS
    inverse = np.linalg.pinv(weights[:, None] * matrix) * weights
    away = (values - values[0]).reshape(len(points), -1)
    terms = (inverse @ away).reshape(-1, *values.shape[1:])
    terms[0] += values[0]
    return np.asarray(terms)


def _monomials(points: FloatArray, powers: IntArray) -> FloatArray:
    return np.asarray(np.prod(points[:, None, :] ** powers[None], axis=2))


def _tested(
    scaled: Scaled, terms: FloatArray, powers: IntArray, members: int, rows: IntArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Scales tried (tests, G), errors (tests, Q), and how far each scale may go up (G,)."""
    count = len(scaled.groups)
    tested = list(held_back(count))
    errors = [_error(scaled, terms, powers, s, members, rows)[0] for s in tested]
    high = np.ones(count)
    for g in range(count):
        for reach in REACHES:
            scales = np.ones(count)
            scales[g] = reach
            error, far = _error(scaled, terms, powers, scales, members, rows)
            if np.nanmax(error, initial=0.0) <= HELD and far <= FAR:
                high[g] = reach
                tested.append(scales)
                errors.append(error)
                break
    return np.array(tested), np.array(errors), high


def _error(
    scaled: Scaled,
    terms: FloatArray,
    powers: IntArray,
    scales: FloatArray,
    members: int,
    rows: IntArray,
) -> tuple[FloatArray, float]:
    """(Q,) largest error over time at these scales, over the spread there; share of far members."""
    true = scaled.members(scales, 0, members)[:, rows]
    weights = _monomials(scales[None], powers)[0]
    gap = np.einsum("t,tnkq->nkq", weights, terms - _centre(terms)) - (true - _centre(terms)[0])
    with np.errstate(invalid="ignore", divide="ignore"):
        size, spread = present.size(gap), present.std(true)
        # where a quantity hardly spreads yet, against what it spreads at most
        spread = np.maximum(spread, 1e-2 * np.nanmax(spread, axis=0, initial=0.0))
        share = np.where(spread > 0, size / spread, np.nan)
    known = np.isfinite(share).any(axis=0)
    worst = np.full(share.shape[1], np.nan)
    worst[known] = np.nanmax(share[:, known], axis=0)
    return worst, scaled.far


def _centre(terms: FloatArray) -> FloatArray:
    """The constant's mean over members, as a term of its own: (terms, 1, times, Q)."""
    centre = np.zeros((terms.shape[0], 1, *terms.shape[2:]))
    centre[0, 0] = present.mean(terms[0])
    return centre
