"""Raise, halve, lengthen, stop: what is decided from held-out errors."""

from __future__ import annotations

from dataclasses import replace

import pytest

from nipc.chain.noise_terms import NoiseTerms
from nipc.chain.steering import Done, Steering, Step, Tried
from nipc.chain.ticks import TICKS
from nipc.problem.study import ChainSettings

FIXED = Steering.of(ChainSettings(arcs=10), 0.01)
FREE = Steering.of(ChainSettings(arcs="auto"), 0.01)


def tried(*errors: float, allowed: float = 0.01) -> list[Tried]:
    return [Tried(k + 1, e / allowed, e, 20 * (k + 1)) for k, e in enumerate(errors)]


def test_a_good_arc_is_accepted_and_a_bad_one_raised():
    assert FIXED.judge(tried(0.005), TICKS, []) == (Step.ACCEPT, "")
    assert FIXED.judge(tried(0.05), TICKS, [])[0] is Step.RAISE
    assert FIXED.judge(tried(0.05, 0.008), TICKS, [])[0] is Step.ACCEPT


def test_a_step_that_brings_nothing_is_the_last():
    step, reason = FIXED.judge(tried(0.05, 0.048), TICKS, [])
    assert step is Step.ACCEPT
    assert "noise terms" in reason
    assert FREE.judge(tried(0.05, 0.048), TICKS, [])[0] is Step.HALVE
    # and when half an arc is no better either, that is said
    step, reason = FREE.judge(tried(0.05, 0.048), TICKS // 2, tried(0.05))
    assert step is Step.ACCEPT
    assert "nor a shorter arc" in reason


def test_a_useless_polynomial_ends_a_chain_of_fixed_arcs():
    errors = tried(3.0, 2.0, 1.0, 0.9)
    assert FIXED.judge(errors, TICKS, [])[0] is Step.STOP
    assert FREE.judge(errors, TICKS, [])[0] is Step.HALVE
    assert FREE.judge(errors, 1, [])[0] is Step.STOP


def test_far_members_that_would_take_more_runs_than_a_degree_raise_it():
    dear = replace(tried(0.005)[0], far=100.0, dearer=40.0)
    assert FIXED.judge([dear], TICKS, [])[0] is Step.RAISE
    assert FIXED.judge([replace(dear, far=30.0)], TICKS, [])[0] is Step.ACCEPT
    none = replace(FIXED, settings=ChainSettings(arcs=10, direct_share=0.0))
    assert none.judge([dear], TICKS, [])[0] is Step.ACCEPT


def test_spans_are_whole_cells_or_parts_of_one():
    assert FREE.span(0, 10 * TICKS) == TICKS
    assert replace(FREE, length=4 * TICKS).span(TICKS, 3 * TICKS) == 3 * TICKS
    assert replace(FREE, length=TICKS // 2).span(TICKS // 4, 9 * TICKS) == TICKS // 2
    assert replace(FREE, length=2 * TICKS).span(TICKS // 2, 9 * TICKS) == TICKS


def test_lengths_follow_ease_and_cost():
    easy = Done(1, 0.1, float("inf"), TICKS, 30, 1.1)
    longer, words = FREE.after(easy)
    assert (longer.length, words) == (2 * TICKS, "easy: next is twice as long")
    # twice the length took far more runs: back, and not again
    back, _ = longer.after(Done(2, 0.1, 0.9, 2 * TICKS, 90, 1.1))
    assert back.length == TICKS
    assert back.after(easy)[0].length == TICKS
    assert FIXED.after(easy)[0].length == TICKS
    dear, words = FREE.after(Done(3, 0.8, 0.9, TICKS, 100, 1.1))
    assert (dear.length, dear.degree) == (TICKS // 2, 2)
    assert "dear" in words


def test_the_tolerance_of_an_arc_is_its_part_of_the_horizons():
    assert FREE.allowed(0.25) == pytest.approx(0.005)
    # half way and nothing used: a quarter of the horizon is half of what is left
    assert FREE.passed(0.5, 0.0).allowed(0.25) == pytest.approx(0.01 * 0.5**0.5)
    # all used: a tenth of the square is left
    assert FREE.passed(0.5, 0.02).allowed(0.25) == pytest.approx(0.01 * 0.05**0.5)
    assert replace(FREE, settings=ChainSettings(arc_tolerance=1e-3)).allowed(0.25) == 1e-3


def test_a_pilot_keeps_the_terms_that_matter():
    import numpy as np

    terms = NoiseTerms((6, 4), (True, False), (True, False))
    assert terms.piloted == (12, 4)
    response = np.zeros((16, 2))
    response[:3, 0] = 1.0, 0.5, 0.1
    response[3:12, 0] = 1e-4
    response[12:, 1] = 1.0
    kept = terms.kept(response, 1e-5)
    assert kept.cell == (3, 4)
    assert kept.at(0.5) == (3, 4)
    assert replace(kept, cell=(7, 4)).at(0.5) == (5, 4)
    assert replace(kept, cell=(7, 4)).at(2.0) == (11, 4)
