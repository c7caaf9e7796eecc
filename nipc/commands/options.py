"""What the commands share: options, and how they say what comes next."""

from __future__ import annotations

import shlex
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

if TYPE_CHECKING:
    from nipc.runs.progress import Progress

StudyFile = Annotated[
    Path, typer.Argument(metavar="STUDY", help="The study file, as study.toml.", show_default=False)
]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON, for scripts.")]
Jobs = Annotated[
    int, typer.Option("--jobs", "-j", help="How many runs at a time; -1: one a processor.")
]
Quiet = Annotated[bool, typer.Option("--quiet", "-q", help="Print errors only.")]


def next_steps(*steps: str) -> None:
    """What comes next, a line each: only a path can make one long, and each can be copied."""
    for head, step in zip(("Next:", *[""] * len(steps)), steps, strict=False):
        print(f"{head:5} {step}")


def quoted(path: Path) -> str:
    """The path as a shell takes it, blanks and all."""
    return shlex.quote(str(path))


def progress_of(quiet: bool) -> Progress:
    """What shows the progress: nothing when quiet, else what suits where the output goes."""
    from nipc.runs.progress import Silent, suited

    return Silent() if quiet else suited()
