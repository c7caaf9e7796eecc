"""Numbers and tables as Fortran and C print them, and what is no number."""

import re

import pytest

from nipc.adapters.table_file import number, read_matches, read_rows
from nipc.errors import PropagatorError


@pytest.mark.parametrize(
    ("word", "value"),
    [
        ("1.5D+03", 1500.0), ("-0.25d-02", -0.0025), (" 7 ", 7.0), (".5", 0.5), ("5.", 5.0),
        ("1.234-105", 1.234e-105), ("-1.0+100", -1e100), ("+3.0E0", 3.0), ("1.5Q0", 1.5),
    ],
)  # fmt: skip
def test_numbers(word, value):
    assert number(word) == value


@pytest.mark.parametrize(
    "word", ["1_000", "1,5", "0x10", "1.5.2", "e5", "--1", "*****", "1.0 2.0", "٣", "1e", "D"]
)
def test_words_that_are_no_number(word):
    with pytest.raises(ValueError, match=re.escape(word)):
        number(word)


def rows(folder, text, columns=(1, 2), **more):
    (folder / "t.out").write_text(text)
    return read_rows(folder / "t.out", columns, **more).tolist()


def test_headers_comments_commas_and_blanks(tmp_path):
    text = "time and place\n# a comment\n 1.0, 2.0D0\n\n\t3.0   4.0 5.0\n"
    assert rows(tmp_path, text, skip=1) == [[1, 2], [3, 4]]


def test_fixed_widths(tmp_path):
    assert rows(tmp_path, " 1.25-3.50\n-2.00 4.00\n", widths=(5, 5)) == [[1.25, -3.5], [-2, 4]]


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("1.0,,3.0\n", "t.out, line 1, field 2: found ''; the field is empty"),
        ("1.0 2.0\n1.0 ******\n", "t.out, line 2, field 2: found '******'; the program's format"),
        ("1.25-3.50 2.0\n", "field 1: found '1.25-3.50'; fields that touch: give their widths"),
        ("1.0\n", "line 1, field 2: the line has only 1 fields"),
        ("1.0 abc\n", "field 2: found 'abc'; a number is expected"),
        ("1.0, 2.0 3.0\n", "field 2: found '2.0 3.0'; a number is expected"),
    ],
)
def test_a_field_that_is_no_number_is_told_with_its_place(text, said, tmp_path):
    with pytest.raises(PropagatorError, match=re.escape(said)):
        rows(tmp_path, text)


def test_scalars_by_pattern(tmp_path):
    (tmp_path / "log").write_text("step 1\n X = 1.0D0 km\nstep 2\n X = 2.0D0 km\n")
    pattern = re.compile(r"^ X = (\S+) km", re.MULTILINE)
    assert read_matches(tmp_path / "log", pattern).tolist() == [[1.0], [2.0]]
    with pytest.raises(PropagatorError, match=r"log, line 1, group 1 of the pattern"):
        read_matches(tmp_path / "log", re.compile("st(e)p"))
