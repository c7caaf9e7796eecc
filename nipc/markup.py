"""Small tables of HTML, for the notebooks in which objects show themselves. All text is escaped."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from html import escape

_CELL = 'style="text-align:left;vertical-align:top;padding:.15em .8em .15em 0"'


def table(rows: Iterable[Sequence[object]], heads: Sequence[str] = ()) -> str:
    """Rows of text; the first cell of each is its head."""
    top = "".join(f"<th {_CELL}>{escape(head)}</th>" for head in heads)
    top = f"<thead><tr>{top}</tr></thead>" if top else ""
    body = []
    for first, *rest in rows:
        cells = "".join(f"<td {_CELL}>{_lines(cell)}</td>" for cell in rest)
        body.append(f"<tr><th {_CELL}>{_lines(first)}</th>{cells}</tr>")
    return f"<table>{top}<tbody>{''.join(body)}</tbody></table>"


def headed(title: str, *parts: str) -> str:
    """Parts of HTML below a title."""
    return f"<div><p><strong>{escape(title)}</strong></p>{''.join(parts)}</div>"


def paragraph(text: str) -> str:
    """Text as a paragraph."""
    return f"<p>{_lines(text)}</p>"


def listed(items: Iterable[str]) -> str:
    """Text as a list."""
    return f"<ul>{''.join(f'<li>{_lines(item)}</li>' for item in items)}</ul>"


def folded(title: str, part: str) -> str:
    """HTML that is shown when its title is clicked."""
    return f"<details><summary>{escape(title)}</summary>{part}</details>"


def _lines(text: object) -> str:
    return escape(str(text)).replace("\n", "<br>")
