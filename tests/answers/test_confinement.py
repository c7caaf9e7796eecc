"""Who is in the box, who has left, who is missing."""

from __future__ import annotations

import numpy as np
import pytest

from nipc.answers.boxes import (
    Box,
    check_start,
    inside_indicator,
    survival_indicator,
    survived,
)
from nipc.answers.confinement import ConfinementAccumulator, product_limit
from nipc.answers.intervals import wilson
from nipc.errors import InputError

TIMES = np.array([0.0, 1.0, 2.0, 3.0])
BOX = Box.single("x", 0, -1.0, 1.0)
NAN = np.nan
# stays; leaves at 2 and comes back; missing from 2; leaves at 1, then missing; ends at 1.5
PATHS = np.array([
    [0.0, 0.5, 0.9, 1.0],
    [0.0, 0.5, 1.1, 0.0],
    [0.0, 0.5, NAN, NAN],
    [0.0, 2.0, NAN, NAN],
    [0.0, 0.5, NAN, NAN],
])[:, :, None]  # fmt: skip
ENDED = np.array([NAN, NAN, NAN, NAN, 1.5])


def gathered(boxes, values=PATHS, ended=ENDED, split=2, **more):
    counts = ConfinementAccumulator(TIMES, boxes, **more)
    counts.update(values[:split], ended[:split])
    counts.update(values[split:], ended[split:])
    return counts.result()


def test_inside_and_survival_by_hand():
    result = gathered([BOX])
    np.testing.assert_allclose(result.inside[0], [1.0, 4 / 5, 1 / 3, 2 / 3])
    np.testing.assert_array_equal(result.members[0], [5, 5, 3, 3])
    # at risk 5, 5, then 3 (one left at 1, one missing from 2): S = 4/5, then 4/5 x 1/3
    np.testing.assert_allclose(result.survival[0], [1.0, 0.8, 0.8 / 3, 0.8 / 3])
    np.testing.assert_allclose(
        np.stack(result.inside_interval)[:, 0, 2], wilson(np.array(1 / 3), np.array(3.0))
    )


def test_indicators_agree_with_the_counts():
    inside = inside_indicator(PATHS, TIMES, BOX, ENDED)
    never_left = survival_indicator(PATHS, TIMES, BOX, ENDED)
    expected_inside = [[1, 1, 1, 1], [1, 1, 0, 1], [1, 1, NAN, NAN], [1, 0, NAN, NAN], [1, 1, 0, 0]]
    expected_survived = [[1, 1, 1, 1], [1, 1, 0, 0], [1, 1, NAN, NAN], [1, 0, 0, 0], [1, 1, 0, 0]]
    np.testing.assert_array_equal(inside, expected_inside)
    np.testing.assert_array_equal(never_left, expected_survived)
    at_end = np.array(expected_survived)[:, -1]
    np.testing.assert_array_equal(survived(PATHS, TIMES, BOX, ENDED), at_end)
    np.testing.assert_array_equal(survived(PATHS[:2], TIMES, BOX), at_end[:2])
    np.testing.assert_allclose(np.nanmean(inside, axis=0), gathered([BOX]).inside[0])


def test_who_goes_missing_and_is_then_seen_outside_stays_missing():
    path = np.array([[0.0, NAN, 2.0, 2.0]])[:, :, None]
    np.testing.assert_array_equal(survival_indicator(path, TIMES, BOX)[0], [1, NAN, NAN, NAN])
    result = gathered([BOX], np.concatenate([path, PATHS[:1]]), np.full(2, NAN))
    np.testing.assert_array_equal(result.survival[0], 1.0)
    np.testing.assert_array_equal(result.inside[0], [1.0, 1.0, 0.5, 0.5])


def test_without_missing_members_survival_is_a_share():
    rng = np.random.default_rng(4)
    times = np.linspace(0, 1, 40)
    walk = np.cumsum(0.2 * rng.standard_normal((3000, 40, 1)), axis=1)
    counts = ConfinementAccumulator(times, [BOX])
    for block in np.split(walk, 3):
        counts.update(block)
    result = counts.result()
    share = survival_indicator(walk, times, BOX).mean(axis=0)
    np.testing.assert_allclose(result.survival[0], share, rtol=1e-12)
    expected = wilson(share, np.full(40, 3000.0))
    np.testing.assert_allclose(np.stack(result.survival_interval)[:, 0], expected, rtol=1e-9)
    quantile, interval = result.exit_quantiles((0.25, 0.5, 0.999))
    assert quantile[1, 0] == times[np.argmax(share <= 0.5)]
    assert interval.low[1, 0] <= quantile[1, 0] <= interval.high[1, 0]
    assert np.isinf(quantile[2, 0])


def test_everybody_out_and_everybody_missing():
    result = gathered([BOX], np.full((4, 4, 1), 5.0), np.full(4, NAN))
    np.testing.assert_array_equal(result.survival[0], 0.0)
    assert result.survival_interval.high[0, -1] == pytest.approx(
        wilson(np.array(0.0), np.array(4.0)).high
    )
    assert result.empty_at_start == ("x",)
    result = gathered([BOX], np.full((4, 4, 1), NAN), np.full(4, NAN))
    assert np.isnan(result.inside).all()
    assert np.isnan(result.survival).all()


def test_joint_box_needs_all_its_quantities():
    two = np.concatenate([PATHS, np.zeros_like(PATHS)], axis=2)
    two[0, 1, 1] = 7.0
    other = Box.single("y", 1, -1.0, np.inf)
    joint = Box.joint("both", [BOX, Box.single("y", 1, -1.0, 1.0)])
    result = gathered([BOX, joint, other], two)
    assert result.inside[1, 1] == pytest.approx(3 / 5)
    assert result.inside[0, 1] == pytest.approx(4 / 5)
    assert result.inside[2, 1] == 1.0


def test_margin_widens_the_interval_to_the_shifted_boxes():
    rng = np.random.default_rng(5)
    values = rng.standard_normal((20000, 4, 1))
    result = gathered([BOX], values, np.full(20000, NAN), margin=np.full((4, 1), 0.1))
    plain = gathered([BOX], values, np.full(20000, NAN))
    np.testing.assert_array_equal(result.inside, plain.inside)
    narrow = (np.abs(values[:, :, 0]) <= 0.9).mean(axis=0)
    wide = (np.abs(values[:, :, 0]) <= 1.1).mean(axis=0)
    n = np.full(4, 20000.0)
    np.testing.assert_allclose(result.inside_interval.low[0], wilson(narrow, n).low)
    np.testing.assert_allclose(result.inside_interval.high[0], wilson(wide, n).high)
    assert np.all(result.survival_interval.low < plain.survival_interval.low)


def test_product_limit_of_a_published_trial():
    """Remission of 21 patients on 6-MP (Freireich et al. 1963), estimates as in Cox & Oakes 1984,
    from memory: 0.857, 0.807, 0.753, 0.690, 0.627, 0.538, 0.448 at weeks 6 to 23.
    """
    relapses = [6, 6, 6, 7, 10, 13, 16, 22, 23]
    withdrawn = [6, 9, 10, 11, 17, 19, 20, 25, 32, 32, 34, 35]
    left = np.bincount(relapses, minlength=40)
    lost = np.bincount(np.array(withdrawn) + 1, minlength=40)  # still seen in their last week
    survival, interval = product_limit(21, left, lost)
    np.testing.assert_allclose(
        survival[[6, 7, 10, 13, 16, 22, 23]],
        [0.857, 0.807, 0.753, 0.690, 0.627, 0.538, 0.448],
        atol=5e-4,
    )
    # Greenwood's standard errors there: 0.0764 at week 6, 0.0963 at 10, 0.1346 at 23
    for week, error in ((6, 0.0764), (10, 0.0963), (23, 0.1346)):
        s = survival[week]
        expected = wilson(np.array(s), np.array(s * (1 - s) / error**2))
        np.testing.assert_allclose([interval.low[week], interval.high[week]], expected, atol=1e-3)


def test_bad_boxes():
    with pytest.raises(InputError, match="not below"):
        Box.single("x", 0, 1.0, 1.0)
    with pytest.raises(InputError, match="not below"):
        Box.single("x", 0, np.nan, 1.0)
    with pytest.raises(InputError, match="nothing is inside it at the start"):
        check_start([BOX], np.array([[2.0], [3.0]]))
    check_start([BOX], np.array([[2.0], [0.5]]))
