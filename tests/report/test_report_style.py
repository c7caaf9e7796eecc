"""The palette against published rules of legibility."""

from __future__ import annotations

from itertools import combinations, pairwise

import numpy as np
import pytest

from nipc.report.style import DARK, LIGHT, LINE_STROKES, STROKES

# Machado, Oliveira & Fernandes (2009), severity 1, linear RGB; from memory, rows sum to 1.
PROTAN = np.array(
    [
        [0.152286, 1.052583, -0.204868],
        [0.114503, 0.786281, 0.099216],
        [-0.003882, -0.048116, 1.051998],
    ]
)
DEUTAN = np.array(
    [
        [0.367322, 0.860646, -0.227968],
        [0.280085, 0.672501, 0.047413],
        [-0.011820, 0.042940, 0.968881],
    ]
)


def linear(colour: str) -> np.ndarray:
    """sRGB to linear, as in WCAG 2.1, definition of relative luminance."""
    channel = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    return np.where(channel <= 0.03928, channel / 12.92, ((channel + 0.055) / 1.055) ** 2.4)


def luminance(colour: str) -> float:
    return float(linear(colour) @ [0.2126, 0.7152, 0.0722])


def contrast(one: str, other: str) -> float:
    """WCAG 2.1, definition of contrast ratio."""
    low, high = sorted((luminance(one), luminance(other)))
    return (high + 0.05) / (low + 0.05)


def lab(rgb: np.ndarray) -> np.ndarray:
    """CIE 1976 L*a*b* of linear sRGB, white D65 (IEC 61966-2-1 matrix)."""
    matrix = np.array(
        [[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]
    )
    ratio = np.clip(matrix @ np.clip(rgb, 0, 1), 0, None) / [0.9505, 1.0, 1.089]
    f = np.where(ratio > 216 / 24389, np.cbrt(ratio), (24389 / 27 * ratio + 16) / 116)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


def test_contrast_of_black_on_white_is_21() -> None:
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)  # WCAG 2.1: the largest there is


@pytest.mark.parametrize("inks", [LIGHT, DARK], ids=["light", "dark"])
def test_text_is_legible(inks: dict[str, str]) -> None:
    for name in ("ink", "soft", "main", "edge"):  # WCAG 2.1, 1.4.3: at least 4.5 for text
        assert contrast(inks[name], inks["paper"]) >= 4.5, name


@pytest.mark.parametrize("inks", [LIGHT, DARK], ids=["light", "dark"])
def test_lines_stand_out(inks: dict[str, str]) -> None:
    for stroke in LINE_STROKES:  # WCAG 2.1, 1.4.11: at least 3 for what must be seen
        assert contrast(inks[stroke.ink], inks["paper"]) >= 3.0, stroke.ink


@pytest.mark.parametrize("sight", [np.eye(3), PROTAN, DEUTAN], ids=["usual", "protan", "deutan"])
@pytest.mark.parametrize("inks", [LIGHT, DARK], ids=["light", "dark"])
def test_strokes_stay_apart(inks: dict[str, str], sight: np.ndarray) -> None:
    """A CIE 1976 difference above 10 is plain at a glance (common practice, no source)."""
    seen = {stroke.ink: lab(sight @ linear(inks[stroke.ink])) for stroke in STROKES}
    gaps = {(a, b): np.linalg.norm(seen[a] - seen[b]) for a, b in combinations(seen, 2)}
    closest = min(gaps, key=gaps.__getitem__)
    assert gaps[closest] > 10, (closest, gaps[closest])


@pytest.mark.parametrize("inks", [LIGHT, DARK], ids=["light", "dark"])
def test_neighbours_differ_in_grey(inks: dict[str, str]) -> None:
    for one, other in pairwise(STROKES):
        greys = [lab(np.full(3, luminance(inks[s.ink])))[0] for s in (one, other)]
        assert abs(greys[0] - greys[1]) > 10, (one.ink, other.ink, greys)


def test_strokes_differ_without_colour() -> None:
    assert len({stroke.hatch for stroke in STROKES}) == len(STROKES)
    assert len({stroke.marker for stroke in STROKES}) == len(STROKES)
    assert len({str(stroke.dash) for stroke in STROKES}) == len(STROKES)


def test_every_ink_has_both_values() -> None:
    assert LIGHT.keys() == DARK.keys()
    assert len(set(LIGHT.values())) == len(LIGHT)  # so that each can be told in a drawing
