"""Tables that are nearly right: each must fail with its place, never pass for another motion."""

import re

import numpy as np
import pytest
from adapters_samples import build, oscillator_batch

from nipc.runs.unit import Unit, call

TIMES = (1, 2, 3, 4)  # the batch's output times
ROWS = tuple(f"{t} {10 * t} 2.0\n" for t in TIMES)
FULL = "".join(ROWS)


def answer(folder, text, **output):
    """What becomes of a run whose program prints just this table."""
    program = folder / "program"
    program.write_text("#!/bin/sh\ncat given > table\n")
    program.chmod(0o755)
    propagator = build(
        "executable", folder, command=("program",), forcing={"file": "f", "step": 1.0},
        inputs=({"file": "given", "text": text},),
        output={"file": "table", "columns": (2, 3), "time_column": 1} | output,
    )  # fmt: skip
    return call(propagator, oscillator_batch(1, times=len(TIMES)), Unit(np.array([0])), None)


def reason(folder, text, **output):
    (problem,) = answer(folder, text, **output).problems
    assert problem is not None, "the table was taken for good"
    return problem.reason


@pytest.mark.parametrize("rows", ["times", "matching"])
def test_the_right_table_is_read(rows, tmp_path):
    found = answer(tmp_path, FULL, rows=rows)
    assert found.problems == (None,)
    assert found.states[0].tolist() == [[10.0 * t, 2.0] for t in TIMES]


@pytest.mark.parametrize("rows", ["times", "matching"])
@pytest.mark.parametrize("place", [0, 2, 3])
@pytest.mark.parametrize("word", ["NaN", "Infinity"])
def test_a_time_that_is_no_number_is_never_the_nearest(rows, place, word, tmp_path):
    text = "".join(
        row.replace(row.split()[0], word, 1) if k == place else row for k, row in enumerate(ROWS)
    )
    said = reason(tmp_path, text, rows=rows)
    assert said.startswith(f"table, row {place + 1}: its time is {float(word)}")


def test_a_row_too_many_whose_time_is_no_number(tmp_path):
    """All rows are there, and one more: it must not be taken in place of them."""
    said = reason(tmp_path, "NaN 99 99\n" + FULL, rows="matching")
    assert said.startswith("table, row 1: its time is nan")


@pytest.mark.parametrize("rows", ["times", "matching"])
@pytest.mark.parametrize("text", ["", "# t x v\n"])
@pytest.mark.parametrize("short_is_lost", [False, True])
def test_a_program_that_wrote_nothing_was_not_lost(rows, text, short_is_lost, tmp_path):
    said = reason(tmp_path, text, rows=rows, short_is_lost=short_is_lost)
    assert said.startswith("table has 0 rows; 4 are expected")


def test_rows_that_stop_early_are_a_loss_where_the_study_says_so(tmp_path):
    found = answer(tmp_path, "".join(ROWS[:2]), short_is_lost=True)
    assert found.problems == (None,)
    assert found.ended.tolist() == [2.5]  # midway between the last row and the next
    assert "has 2 rows; 4 are expected" in reason(tmp_path, "".join(ROWS[:2]))


@pytest.mark.parametrize("word", ["NaN", "-Infinity", "1.0E+999"])
def test_a_state_that_is_no_number_fails_the_run(word, tmp_path):
    assert reason(tmp_path, FULL.replace("30", word)) == "the state is not finite at t = 3"


@pytest.mark.parametrize(
    ("word", "said"),
    [
        ("******", "table, line 3, field 2: found '******'; the program's format is too narrow"),
        ("3.0-4.0", "table, line 3, field 2: found '3.0-4.0'; fields that touch"),
        ("north", "table, line 3, field 2: found 'north'; a number is expected"),
    ],
)
def test_words_that_are_no_number_are_told_by_line_and_field(word, said, tmp_path):
    assert re.match(re.escape(said), reason(tmp_path, FULL.replace("30", word)))


@pytest.mark.parametrize(("word", "value"), [("1.234D-05", 1.234e-5), ("1.234-105", 1.234e-105)])
def test_exponents_as_fortran_prints_them(word, value, tmp_path):
    found = answer(tmp_path, FULL.replace("30", word))
    assert found.problems == (None,)
    assert found.states[0, 2, 0] == value
