"""Progress in a notebook: one line of HTML that is rewritten in place."""

from __future__ import annotations

import html
import sys
import time
from typing import Any

from nipc.runs.journey import ArcTold, Journey, Rate, duration

EVERY = 0.2  # seconds between two rewritings


def in_notebook() -> bool:
    """Whether this process is the kernel of a notebook."""
    shell = getattr(sys.modules.get("IPython"), "get_ipython", lambda: None)()
    return getattr(shell, "kernel", None) is not None


class Notebook:
    """A line with the arc, the batch and the time left."""

    def __init__(self) -> None:
        self._journey = Journey()
        self._label, self._total, self._rate = "", 0, Rate(0)
        self._handle: Any = None
        self._last = -1.0

    def start(self, label: str, total: int, reused: int) -> None:
        self._label, self._total, self._rate = label, total, Rate(total - reused)
        self._show()

    def advance(self, done: int, failed: int) -> None:
        self._rate.advance(done, failed)
        if time.monotonic() - self._last >= EVERY:
            self._show()

    def finish(self) -> None:
        self._show()

    def arc(self, told: ArcTold) -> None:
        self._journey.hear(told)
        self._show()

    def _show(self) -> None:
        from IPython.display import HTML, display  # type: ignore[import-not-found]

        self._last = time.monotonic()
        line = HTML(self.markup())
        if self._handle is None:
            self._handle = display(line, display_id=True)
        else:
            self._handle.update(line)

    def markup(self) -> str:
        """What is shown; names are escaped."""
        done = self._total - self._rate.left
        # arcs whose runs are all kept are told without a batch
        words = f"{self._label}: {done} of {self._total} runs, {self._rate}" if self._total else ""
        share, arc = done / max(self._total, 1), self._journey.arc
        if arc is not None:
            share = arc.share
            left = self._journey.seconds_left
            known = f", {duration(left)} left" if left is not None and share < 1.0 else ""
            words = f"{arc.place}{known}; {arc}" + (f"; {words}" if words else "")
        bar = f'<progress value="{share:.4f}" max="1" style="width:12em"></progress>'
        return f"<div>{bar} <small>{html.escape(words)}</small></div>"
