"""What is done about runs that fail."""

from __future__ import annotations

from dataclasses import dataclass

from nipc.errors import RunsError
from nipc.runs.unit import Problem, Unit

FIRST = 16  # runs that must all fail before the propagator itself is doubted


@dataclass(frozen=True)
class FailurePolicy:
    """A failed run is tried again alone `retries` times. When more than the share `tolerated` of a
    batch has failed, the rest is not run. `again`: failures kept from before are tried anew.
    """

    retries: int = 1
    tolerated: float = 1.0
    again: bool = False


class Tally:
    """How many runs of a batch have failed, and what was put off meanwhile."""

    def __init__(self, total: int, failed: int) -> None:
        self.total, self.failed, self.good, self.last = total, failed, 0, ""
        self._held: list[Unit] = []

    def fail(self, problem: Problem) -> None:
        self.failed += 1
        self.last = problem.reason

    def hold(self, units: list[Unit]) -> None:
        """These wait until it is known whether the propagator can run at all."""
        self._held = units

    def release(self) -> list[Unit]:
        """What waited."""
        held, self._held = self._held, []
        return held

    def check(self, policy: FailurePolicy) -> None:
        """Raise when more has failed than is tolerated."""
        if self.failed > policy.tolerated * self.total:
            raise RunsError(
                f"{self.failed} of {self.total} runs have failed, more than the"
                f" {policy.tolerated:.0%} that is tolerated; the rest is not run. Last reason:"
                f" {self.last}"
            )
        if self._held and not self.good and self.failed >= FIRST:
            raise RunsError(
                f"the first {self.failed} runs have all failed; the rest of {self.total} is not"
                f" run. Last reason: {self.last}"
            )
