"""A figure as markup that lives inside a page: small, and in the page's own colours.

Inks become CSS variables, so that one drawing serves light, dark and print; text stays text; ids
are made the page's own; coordinates keep a hundredth of a point.
"""

from __future__ import annotations

import io
import re
from dataclasses import dataclass

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from nipc.report.style import LIGHT, styled

_INK = {value: f"var(--{name})" for name, value in LIGHT.items()}
_COLOUR = re.compile(r"#[0-9a-f]{6}(?![0-9a-f])")
_NUMBER = re.compile(r"-?\d+\.\d{3,}")
_ID = re.compile(r'\sid="([^"]*)"')
_REFERENCE = re.compile(r"""url\(#([^)]+)\)|href="#([^"]+)\"""")
_TAG = re.compile(r"<(?!text|/text|tspan|/tspan)[^>]*>")


@dataclass(frozen=True)
class TimeFrame:
    """Where time runs in a drawing, in its own units: for a cursor and for reading values."""

    left: float
    right: float
    top: float
    bottom: float
    start: float
    end: float
    logarithmic: bool
    elapsed: bool


@dataclass(frozen=True)
class Drawing:
    """Inline SVG, its size in points, and its time axis if it has one."""

    markup: str
    width: float
    height: float
    frame: TimeFrame | None


def inline(figure: Figure, key: str) -> Drawing:
    """The figure as inline SVG; `key` sets its ids apart from those of the page's other figures."""
    from matplotlib import rc_context

    target = io.StringIO()
    blank = {"Date": None, "Creator": None, "Format": None, "Type": None}
    with styled(), rc_context({"svg.hashsalt": key, "savefig.facecolor": "none"}):
        engine = figure.get_layout_engine()
        if engine is not None:  # once, rather than in a drawing pass of its own
            engine.execute(figure)
            figure.set_layout_engine("none")
        figure.savefig(target, format="svg", metadata=blank)
    width, height = (72.0 * float(side) for side in figure.get_size_inches())
    return Drawing(
        _compact(target.getvalue(), key, width, height),
        width,
        height,
        _time_frame(figure, width, height),
    )


def _compact(text: str, key: str, width: float, height: float) -> str:
    body = text[text.index("<svg") :]
    body = body[body.index(">") + 1 : body.rindex("</svg>")]
    body = re.sub(
        r"<metadata>.*?</metadata>|<!--.*?-->|<style.*?</style>", "", body, flags=re.DOTALL
    )
    used = {a or b for a, b in _REFERENCE.findall(body)}
    body = _ID.sub(lambda m: f' id="{key}-{m[1]}"' if m[1] in used else "", body)
    body = _REFERENCE.sub(
        lambda m: f"url(#{key}-{m[1]})" if m[1] else f'href="#{key}-{m[2]}"', body
    )
    body = _TAG.sub(lambda m: _tag(m[0]), body)
    body = re.sub(r"<text [^>]*>", lambda m: _text_tag(m[0]), body)
    body = re.sub(r">\s+<", "><", body)
    body = re.sub(r"<g>((?:(?!</?g).)*)</g>", r"\1", body, flags=re.DOTALL)
    return (
        f'<svg viewBox="0 0 {width:.1f} {height:.1f}" aria-hidden="true" focusable="false">'
        f"{body}</svg>"
    )


def _tag(tag: str) -> str:
    """Inks to variables, long numbers cut, path data on one line."""
    tag = _NUMBER.sub(lambda m: f"{float(m[0]):.2f}".rstrip("0").rstrip("."), tag)
    tag = _COLOUR.sub(lambda m: _INK.get(m[0], m[0]), tag)
    tag = re.sub(r' transform="rotate\(-?0 [^"]*"', "", tag)
    return re.sub(r"\s+", " ", tag).replace("xlink:href", "href")


def _text_tag(tag: str) -> str:
    """A text takes its family from the page."""
    tag = re.sub(r"font: (?:[a-z]+ )?([\d.]+)px [^;\"]*", r"font-size: \1px", tag)
    tag = re.sub(r"font-family: [^;\"]*;?", "", tag)
    return _tag(tag)


def _time_frame(figure: Figure, width: float, height: float) -> TimeFrame | None:
    axes: list[Axes] = [ax for ax in figure.axes if ax.get_visible()]
    if not axes or not axes[-1].get_xlabel().startswith("time"):
        return None
    boxes = [ax.get_position() for ax in axes]
    start, end = axes[-1].get_xlim()
    sides = (
        boxes[-1].x0 * width,
        boxes[-1].x1 * width,
        (1 - max(b.y1 for b in boxes)) * height,
        (1 - min(b.y0 for b in boxes)) * height,
    )
    left, right, top, bottom = (round(float(side), 2) for side in sides)
    return TimeFrame(
        left,
        right,
        top,
        bottom,
        float(start),
        float(end),
        axes[-1].get_xscale() == "log",
        "since" in axes[-1].get_xlabel(),
    )
