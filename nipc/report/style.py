"""One hand for every figure and for the page: inks, line styles, hatches, sizes.

Every ink has a light and a dark value; a figure is drawn with the light ones, and in the page
each becomes a CSS variable of the same name. Sources differ in lightness, hatch, dash and
marker at once, so that they stay apart in grey and for colour-blind readers.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from functools import wraps
from typing import Any, ParamSpec, TypeVar

LIGHT = {
    "paper": "#fcfbf8",
    "ink": "#1c2126",
    "soft": "#5a6068",
    "rule": "#b9b6ad",
    "faint": "#e4e1d8",
    "main": "#24507a",
    "band": "#8fb0cd",
    "edge": "#a8402d",
    "doubt": "#8a8375",
    "first": "#1d4568",
    "second": "#dfb25e",
    "third": "#3f8578",
    "fourth": "#e2c9c0",
    "fifth": "#8c3b4a",
    "sixth": "#a9c2d6",
    "seventh": "#6b5b93",
    "rest": "#d3d0c6",
}
DARK = {
    "paper": "#16191d",
    "ink": "#e6e3dc",
    "soft": "#a9adb1",
    "rule": "#565b60",
    "faint": "#2a2f34",
    "main": "#8fbbe6",
    "band": "#4a7199",
    "edge": "#f0907a",
    "doubt": "#9a9383",
    "first": "#8fc1f0",
    "second": "#a5782a",
    "third": "#63b8a0",
    "fourth": "#6d4f46",
    "fifth": "#f7ccd2",
    "sixth": "#35546e",
    "seventh": "#8f7fc4",
    "rest": "#3d4247",
}

WIDTH, HEIGHT = 6.4, 3.7
"""Inches: 461 x 266 points, so that 11 pt stay legible when a page is 400 pixels wide."""


@dataclass(frozen=True)
class Stroke:
    """How one of several things is told from the others."""

    ink: str
    hatch: str
    dash: Any
    marker: str

    @property
    def colour(self) -> str:
        return LIGHT[self.ink]


STROKES = (
    Stroke("first", "", "solid", "o"),
    Stroke("second", "//", (0, (6, 2)), "s"),
    Stroke("third", "\\\\", (0, (2, 1.4)), "^"),
    Stroke("fourth", "||", (0, (8, 2, 2, 2)), "D"),
    Stroke("fifth", "xx", (0, (1, 1)), "v"),
    Stroke("sixth", "--", (0, (4, 1, 1, 1, 1, 1)), "P"),
    Stroke("seventh", "++", (0, (10, 3)), "X"),
)

LINE_STROKES = tuple(STROKES[i] for i in (0, 4, 2, 6))
"""Those dark enough for thin lines, in the order in which quantities take them."""

SETTINGS: Any = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": 11.5,
    "text.color": LIGHT["ink"],
    "text.parse_math": False,
    "axes.edgecolor": LIGHT["soft"],
    "axes.labelcolor": LIGHT["ink"],
    "axes.facecolor": "none",
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "axes.axisbelow": True,
    "axes.unicode_minus": True,
    "axes.formatter.useoffset": False,
    "axes.formatter.use_mathtext": False,
    "grid.color": LIGHT["faint"],
    "grid.linewidth": 0.7,
    "xtick.color": LIGHT["soft"],
    "ytick.color": LIGHT["soft"],
    "xtick.labelcolor": LIGHT["ink"],
    "ytick.labelcolor": LIGHT["ink"],
    "xtick.labelsize": 11,
    "ytick.labelsize": 11,
    "hatch.linewidth": 0.6,
    "legend.frameon": False,
    "legend.fontsize": 10.5,
    "legend.handlelength": 2.2,
    "legend.borderaxespad": 0.0,
    "legend.borderpad": 0.0,
    "legend.columnspacing": 1.4,
    "figure.facecolor": "none",
    "savefig.facecolor": LIGHT["paper"],
    "path.simplify": True,
    "path.simplify_threshold": 0.4,
    "svg.fonttype": "none",
    "pdf.fonttype": 42,
}


@contextmanager
def styled() -> Iterator[None]:
    """Matplotlib in the style of the report, for the length of a `with`."""
    import matplotlib

    with matplotlib.rc_context(SETTINGS):
        yield


P = ParamSpec("P")
R = TypeVar("R")


def drawn(function: Callable[P, R]) -> Callable[P, R]:
    """A figure function that draws in the style of the report."""

    @wraps(function)
    def inside(*args: P.args, **kwargs: P.kwargs) -> R:
        with styled():
            return function(*args, **kwargs)

    return inside


def stroke(index: int) -> Stroke:
    """The stroke of the index-th source; they repeat after seven."""
    return STROKES[index % len(STROKES)]


def line_stroke(index: int) -> Stroke:
    """The stroke of the index-th of several lines."""
    return LINE_STROKES[index % len(LINE_STROKES)]
