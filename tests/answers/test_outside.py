"""Members outside what runs cover may be anywhere: probabilities hold either way."""

from __future__ import annotations

import numpy as np
import pytest

from nipc.answers.boxes import Box
from nipc.answers.confinement import ConfinementAccumulator
from nipc.answers.outside import DoubtfulConfinement

BOX = Box.single("q", 0, -1.0, 1.0)
TIMES = np.array([0.0, 1.0])


def members(inside, out):
    """So many members in the box, so many not, at both times."""
    return np.repeat(np.repeat([0.0, 2.0], [inside, out]), 2).reshape(-1, 2, 1)


def test_the_interval_runs_from_none_inside_to_all():
    """Of 1,000, 700 surely in, 200 surely out, 100 in doubt (50 told in, 50 out): 0.7 to 0.8."""
    values = np.concatenate([members(700, 200), members(50, 50)])
    doubted = np.arange(1000) >= 900
    found = DoubtfulConfinement(TIMES, [BOX], np.zeros((2, 1)))
    for rows in (slice(0, 950), slice(950, 1000)):
        found.update(values[rows], None, doubted[rows])
    told = found.result()
    assert told.inside[0, 1] == pytest.approx(0.75)
    # Wilson's half-width at 0.7 of 1,000 is 0.028
    for low, high in (told.inside_interval, told.survival_interval):
        assert low[0, 1] == pytest.approx(0.7 - 0.0285, abs=2e-3)
        assert high[0, 1] == pytest.approx(0.8 + 0.0285, abs=2e-3)


def test_without_doubt_nothing_changes():
    values, ended = members(60, 40), np.where(np.arange(100) < 5, 0.5, np.nan)
    plain = ConfinementAccumulator(TIMES, [BOX], np.zeros((2, 1)))
    plain.update(values, ended)
    for outside in (None, np.zeros(100, dtype=bool)):
        found = DoubtfulConfinement(TIMES, [BOX], np.zeros((2, 1)))
        found.update(values, ended, outside)
        assert np.array_equal(found.result().inside, plain.result().inside)
        assert np.array_equal(
            found.result().survival_interval.low, plain.result().survival_interval.low
        )


def test_ended_members_stay_ended_among_those_in_doubt():
    """Ten ended, ten others in doubt: from 0.8 to 0.9."""
    ended = np.where(np.arange(100) < 10, 0.5, np.nan)
    found = DoubtfulConfinement(TIMES, [BOX], np.zeros((2, 1)))
    found.update(members(100, 0), ended, np.arange(100) >= 90)
    told = found.result()
    assert told.inside[0].tolist() == [1.0, 0.9]
    assert told.inside_interval.low[0, 1] < 0.8
    assert told.inside_interval.high[0, 1] > 0.9
