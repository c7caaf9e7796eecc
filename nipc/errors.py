"""The exceptions of nipc: what went wrong, where, and what would be right.

`exit_code` is what the command line returns: 1, the work failed; 2, the user's input is wrong.
"""

from __future__ import annotations

from dataclasses import dataclass


class NipcError(Exception):
    """Something that nipc can explain to its user without a traceback."""

    exit_code = 1


class InputError(NipcError):
    """The user's input is wrong; nothing has been run."""

    exit_code = 2


@dataclass(frozen=True)
class Finding:
    """One thing that is wrong in a study file."""

    key: str
    message: str
    line: int | None = None

    def __str__(self) -> str:
        where = f"line {self.line}, " if self.line is not None else ""
        return f"{where}{self.key or 'the file'}: {self.message}"


class StudyError(InputError):
    """A study cannot be used; `findings` lists all that is wrong with it."""

    def __init__(self, findings: list[Finding], file: str = "study") -> None:
        self.findings = findings
        self.file = file
        count = "1 thing is" if len(findings) == 1 else f"{len(findings)} things are"
        lines = "\n".join(f"  {finding}" for finding in findings)
        super().__init__(f"{file}: {count} wrong\n{lines}")


class PropagatorError(NipcError):
    """One run of the propagator failed; the message is kept in the ledger as its reason."""


class Ended(Exception):  # noqa: N818 - nothing is wrong
    """Raised by a user's propagator: the motion ended at `time` (re-entry, a lost particle).

    `states` (k, d) are those at the first k output times, all of them up to `time`.
    """

    def __init__(self, time: float, states: object = None) -> None:
        super().__init__(time, states)
        self.time, self.states = time, states


class FitError(NipcError):
    """An expansion cannot be fitted to these runs."""


class ChartError(InputError):
    """A chart is singular where it would be used."""


class LedgerError(NipcError):
    """The ledger cannot be read or written."""


class RunsError(NipcError):
    """Too many runs failed for an answer to be given."""


class Interrupted(NipcError):  # noqa: N818 - nothing is wrong
    """The user stopped the work; what was finished is kept."""

    exit_code = 130
