"""The command line, called in this process: importing once is quicker than a process a call."""

from __future__ import annotations

import sys
from dataclasses import dataclass

import pytest


@dataclass(frozen=True)
class Done:
    code: int
    out: str
    err: str


@pytest.fixture
def command(monkeypatch, capsys):
    """command(*words) -> Done; what nipc would show as a traceback fails the test."""

    def call(*words: object) -> Done:
        from nipc.cli import main

        monkeypatch.setattr(sys, "argv", ["nipc", *map(str, words)])
        monkeypatch.setenv("COLUMNS", "80")
        with pytest.raises(SystemExit) as left:
            main()
        shown = capsys.readouterr()
        assert "Traceback" not in shown.out + shown.err
        return Done(int(left.value.code or 0), shown.out, shown.err)

    return call
