"""Notes of arcs, gathered by kind: what they say apart from their numbers."""

from __future__ import annotations

import re
from collections.abc import Sequence

LONGEST = 62


def kinds(notes: Sequence[str]) -> dict[str, list[int]]:
    """Arcs by what their notes say, in the order in which it is first said.

    A note may say several things, parted by semicolons. What stands in brackets, and numbers, are
    left out, so that like notes fall together.
    """
    found: dict[str, list[int]] = {}
    for arc, note in enumerate(notes):
        for part in dict.fromkeys(kind(part) for part in note.split(";")):
            if part:
                found.setdefault(part, []).append(arc)
    return found


def kind(note: str) -> str:
    """A note without its numbers, short enough for a line of a figure."""
    words = re.sub(r"\([^()]*\)", " ", note)
    words = re.sub(r"\bat degree \d+", " ", words)
    words = " ".join(re.sub(r"(?<![\w.])[-+]?\d[\d.,]*(e[-+]?\d+)?(?:\s?%)?", "…", words).split())
    return words if len(words) <= LONGEST else words[: LONGEST - 1].rstrip() + "…"
